"""Cross-products of many slots on their way from units to their parents and back, units first.

:mod:`campaign.methods.nested_transfer` goes through the kinds of units one after another, which suits units
of a few slots. Here all kinds go together: every number of a parent's matrix is looked up among those of its
child by one list of places, and where several slots of the parent are one slot of the child, what they give
back is added up by a second list.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from campaign.methods.nested_design import FloatArray, IntArray
from campaign.methods.nested_transfer import Step, Transfer


@dataclass(frozen=True)
class _Lookup:
    """Where the numbers of all units are found, (units · k · k,), and what they are multiplied by."""

    places: IntArray
    scale: FloatArray | None

    def of(self, flat: FloatArray) -> FloatArray:
        """Look up in (R, numbers)."""
        found = flat.take(self.places, axis=1)
        if self.scale is not None:
            found *= self.scale
        return found


@dataclass(frozen=True)
class _Extra:
    """What more than one number of a parent gives to one number of a unit: the others, sorted by receiver."""

    lookup: _Lookup
    starts: IntArray
    receivers: IntArray


@dataclass(frozen=True)
class Routes:
    """The ways of one level.

    Attributes
    ----------
    units, slots
        Of the level; slots count the response.
    parents, parent_slots
        Of the next outer level, or one parent that holds the fixed part.
    parent
        (units,), ascending.
    seats
        For the first unit of every parent, the second, and so on: (units, their parents).
    each
        Number of units where every parent has the same, else 0.
    out, back, extra
        Lookups of a parent's numbers among its unit's, and the other way; None: they are the same.
    """

    units: int
    slots: int
    parents: int
    parent_slots: int
    parent: IntArray
    seats: tuple[tuple[IntArray, IntArray], ...]
    each: int
    out: _Lookup | None
    back: _Lookup | None
    extra: _Extra | None

    def hand_over(self, after: FloatArray) -> FloatArray:
        """Add up the units of each parent: (R, units, m, m) → (R, parents, m', m')."""
        replicates, k = len(after), self.parent_slots
        if self.out is not None:
            after = self.out.of(after.reshape(replicates, -1)).reshape(replicates, -1, k, k)
        if self.each == 1:
            return after
        if self.each:
            return np.asarray(after.reshape(replicates, self.parents, self.each, k, k).sum(axis=2))
        total = np.zeros((replicates, self.parents, k, k))
        for units, parents in self.seats:
            total[:, parents] += after[:, units]
        return total

    def take_back(self, adjoint: FloatArray) -> FloatArray:
        """Adjoint of :meth:`hand_over`: (R, parents, m', m') → (R, units, m, m), never the same memory."""
        replicates = len(adjoint)
        if self.back is None:
            return np.repeat(adjoint, self.each, axis=1) if self.each else adjoint[:, self.parent]
        flat = adjoint.reshape(replicates, -1)
        given = self.back.of(flat)
        if self.extra is not None:
            more = self.extra.lookup.of(flat)
            given[:, self.extra.receivers] += np.add.reduceat(more, self.extra.starts, axis=1)
        return given.reshape(replicates, self.units, self.slots, self.slots)


def routes_of(step: Step, slots: int) -> Routes:
    """Find the ways of a level whose units have so many slots, the response among them."""
    parent = step.parent_of_unit
    source = np.full((step.units, step.parent_slots), -1, dtype=np.int64)
    scale = np.zeros((step.units, step.parent_slots))
    for transfer in step.transfers:
        _enter(transfer, source, scale)
    plain = slots == step.parent_slots and bool((source == np.arange(slots)).all() and (scale == 1.0).all())
    counts = np.bincount(parent, minlength=step.parent_units)
    back, extra = (None, None) if plain else _back(source, scale, parent, slots)
    return Routes(
        units=step.units,
        slots=slots,
        parents=step.parent_units,
        parent_slots=step.parent_slots,
        parent=parent,
        seats=_seats(parent, step.seats),
        each=int(counts[0]) if (counts == counts[0]).all() else 0,
        out=None if plain else _out(source, scale, slots),
        back=back,
        extra=extra,
    )


def _enter(transfer: Transfer, source: IntArray, scale: FloatArray) -> None:
    children = np.arange(len(source)) if transfer.children is None else transfer.children
    at = np.ix_(children, transfer.target)
    source[at] = transfer.source
    scale[at] = transfer.scale_of_slots().T


def _seats(parent: IntArray, seats: int) -> tuple[tuple[IntArray, IntArray], ...]:
    seat = np.arange(len(parent)) - np.searchsorted(parent, parent)
    at = [np.flatnonzero(seat == k) for k in range(seats)]
    return tuple((units, parent[units]) for units in at)


def _squared(scale: FloatArray) -> FloatArray | None:
    square = (scale[:, :, None] * scale[:, None, :]).ravel()
    return None if (square == 1.0).all() else square


def _out(source: IntArray, scale: FloatArray, slots: int) -> _Lookup:
    """Missing slots are looked up anywhere: their scale is zero."""
    slot = np.maximum(source, 0)
    unit = np.arange(len(source))[:, None, None] * slots**2
    return _Lookup((unit + slot[:, :, None] * slots + slot[:, None, :]).ravel(), _squared(scale))


def _back(source: IntArray, scale: FloatArray, parent: IntArray, slots: int) -> tuple[_Lookup, _Extra | None]:
    """For every number of a unit the first of its parent's that it goes to; all further ones."""
    size = source.shape[1]
    unit, a, b = np.nonzero((source >= 0)[:, :, None] & (source >= 0)[:, None, :])
    receiver = (unit * slots + source[unit, a]) * slots + source[unit, b]
    giver = (parent[unit] * size + a) * size + b
    factor = scale[unit, a] * scale[unit, b]
    order = np.argsort(receiver, kind="stable")
    receiver, giver, factor = receiver[order], giver[order], factor[order]
    first = np.concatenate([[True], receiver[1:] != receiver[:-1]])
    places = np.zeros(len(source) * slots**2, dtype=np.int64)
    weights = np.zeros(len(places))
    places[receiver[first]], weights[receiver[first]] = giver[first], factor[first]
    lookup = _Lookup(places, None if (weights == 1.0).all() else weights)
    if first.all():
        return lookup, None
    receiver, giver, factor = receiver[~first], giver[~first], factor[~first]
    starts = np.flatnonzero(np.concatenate([[True], receiver[1:] != receiver[:-1]]))
    more = _Lookup(giver, None if (factor == 1.0).all() else factor)
    return lookup, _Extra(more, starts, receiver[starts])
