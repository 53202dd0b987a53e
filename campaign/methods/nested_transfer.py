"""Levels of a compressed nested model, and how the slots of a unit become slots of its parent and back."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from campaign.methods.nested_design import FloatArray, IntArray


@dataclass(frozen=True)
class Block:
    """A random effect in its level: term number, size d, copies, first place in the level's random slots."""

    term: int
    size: int
    copies: int
    start: int


@dataclass(frozen=True)
class Transfer:
    """Slots that units of one kind hand to their parents.

    Attributes
    ----------
    children
        Units of this kind, sorted by parent; None for all units.
    starts
        Where in `children` a new parent begins.
    parents
        The parents, one for each start.
    parent_of_child
        Parent of each child of `children`.
    source, target
        Slot of the child and slot of the parent, pairwise; the last pair is the response.
    scale
        (pairs, children) what the child's slot is multiplied by to be the parent's; None: by one.
    children_each
        Number of children where every parent here has the same, else 0.
    every_parent
        Whether `parents` are all units of the outer level.
    """

    children: IntArray | None
    starts: IntArray
    parents: IntArray
    parent_of_child: IntArray
    source: IntArray
    target: IntArray
    scale: FloatArray | None
    children_each: int
    every_parent: bool

    @cached_property
    def doubles(self) -> tuple[IntArray, list[tuple[int, int]]]:
        """First pair of each distinct slot of the child; every further pair with the first of its slot."""
        _, first, number = np.unique(self.source, return_index=True, return_inverse=True)
        rest = np.setdiff1d(np.arange(len(self.source)), first)
        return first, [(int(k), int(first[number[k]])) for k in rest]

    def scale_of_slots(self) -> FloatArray:
        """`scale`, or ones that broadcast to it."""
        return np.ones((len(self.source), 1)) if self.scale is None else self.scale


@dataclass(frozen=True)
class Step:
    """One level of the elimination.

    Attributes
    ----------
    level
        Name of the level.
    units
        Number of its units.
    random
        Slots of the level's own random columns, block after block, copy after copy.
    blocks
        The random effects of the level.
    transfers
        How what is left goes to the next outer level (or to the fixed part).
    parent_units, parent_slots
        Size of the next outer level; slots count the response.
    """

    level: str
    units: int
    random: IntArray
    blocks: tuple[Block, ...]
    transfers: tuple[Transfer, ...]
    parent_units: int
    parent_slots: int

    @cached_property
    def parent_of_unit(self) -> IntArray:
        """Parent of each unit, ascending."""
        parent = np.zeros(self.units, dtype=np.int64)
        for transfer in self.transfers:
            children = np.arange(self.units) if transfer.children is None else transfer.children
            parent[children] = transfer.parent_of_child
        return parent

    @cached_property
    def seat(self) -> IntArray:
        """Place of each unit among its parent's, parents one after another with `seats` places each."""
        parent = self.parent_of_unit
        begins = np.searchsorted(parent, np.arange(self.parent_units))
        return np.asarray(parent * self.seats + np.arange(self.units) - begins[parent])

    @cached_property
    def seats(self) -> int:
        """Most units of one parent."""
        counts = np.zeros(self.parent_units, dtype=np.int64)
        for transfer in self.transfers:
            counts += np.bincount(transfer.parent_of_child, minlength=self.parent_units)
        return int(counts.max())


def hand_over(step: Step, after: FloatArray, replicates: int) -> FloatArray:
    """Add up the units of each parent, slot by slot.

    Parameters
    ----------
    step
        The level.
    after
        (m, m, R · units) cross-products of its units.
    replicates
        R.

    Returns
    -------
    FloatArray
        (m', m', R · parents).
    """
    split = after.reshape(after.shape[0], after.shape[1], replicates, step.units)
    if len(step.transfers) == 1 and len(step.transfers[0].source) == step.parent_slots:
        only = step.transfers[0]
        return _summed(_picked(split, only), only).reshape(step.parent_slots, step.parent_slots, -1)
    out = np.zeros((step.parent_slots, step.parent_slots, replicates, step.parent_units))
    for transfer in step.transfers:
        added = _summed(_picked(split, transfer), transfer)
        if not transfer.every_parent:
            spread = np.zeros((*added.shape[:3], step.parent_units))
            spread[..., transfer.parents] = added
            added = spread
        out[np.ix_(transfer.target, transfer.target)] += added
    return out.reshape(step.parent_slots, step.parent_slots, -1)


def _picked(split: FloatArray, transfer: Transfer) -> FloatArray:
    """The children of a transfer with the slots they hand over, (k, k, R, children)."""
    if transfer.children is not None:
        split = split[..., transfer.children]
    if not _in_order(transfer.source, len(split)):
        split = split[transfer.source[:, None], transfer.source[None, :]]
    return split if transfer.scale is None else split * _squared_scale(transfer.scale)


def _in_order(source: IntArray, slots: int) -> bool:
    return len(source) == slots and bool((source == np.arange(slots)).all())


def _summed(block: FloatArray, transfer: Transfer) -> FloatArray:
    """Sum over the children of each parent, (k, k, R, parents)."""
    each = transfer.children_each
    if each == 1:
        return block
    if 1 < each <= 8:
        total = block[..., 0::each] + block[..., 1::each]
        for k in range(2, each):
            total += block[..., k::each]
        return total
    return np.add.reduceat(block, transfer.starts, axis=3)


def _squared_scale(scale: FloatArray) -> FloatArray:
    return (scale[:, None] * scale[None, :])[:, :, None, :]


def take_back(step: Step, adjoint: FloatArray, slots: int, replicates: int) -> FloatArray:
    """Adjoint of :func:`hand_over`: what the units (m, m, R · units) receive of their parents' adjoint."""
    parents = adjoint.reshape(step.parent_slots, step.parent_slots, replicates, step.parent_units)
    whole = len(step.transfers) == 1 and step.transfers[0].children is None
    if whole and _in_order(step.transfers[0].source, slots):
        return _given(parents, step.transfers[0]).reshape(slots, slots, -1)
    out = np.zeros((slots, slots, replicates, step.units))
    for transfer in step.transfers:
        places, given = _without_doubles(_given(parents, transfer), transfer)
        if transfer.children is None:
            out[np.ix_(places, places)] += given
        elif len(places) == slots:
            out[..., transfer.children] = given[np.ix_(np.argsort(places), np.argsort(places))]
        else:
            here = np.zeros((slots, slots, replicates, len(transfer.children)))
            here[np.ix_(places, places)] = given
            out[..., transfer.children] = here
    return out.reshape(slots, slots, -1)


def _given(parents: FloatArray, transfer: Transfer) -> FloatArray:
    """What each child receives of its parent's adjoint, in the order of the transfer, (k, k, R, children)."""
    if not _in_order(transfer.target, len(parents)):
        parents = parents[np.ix_(transfer.target, transfer.target)]
    if not (transfer.every_parent and transfer.children_each == 1):
        parents = parents[..., transfer.parent_of_child]
    return parents if transfer.scale is None else parents * _squared_scale(transfer.scale)


def _without_doubles(given: FloatArray, transfer: Transfer) -> tuple[IntArray, FloatArray]:
    """Distinct slots of the child and what they receive: rows and columns of the same slot added up."""
    first, doubles = transfer.doubles
    if not doubles:
        return transfer.source, given
    total = given.copy()
    for k, same in doubles:
        total[same] += total[k]
    for k, same in doubles:
        total[:, same] += total[:, k]
    return transfer.source[first], total[np.ix_(first, first)]
