"""Compression of a nested model: rows become cross-products of a few columns per innermost unit.

Within one unit (say a trial) most columns of a mixed model are the same column seen twice: the fixed line of
a generation, the module's line and the sensor's line are all [1, x] there. A *slot* is one such distinct
column. Going outwards, slots part again (the lines of two positions are different columns of their module),
and a *transfer* says which slot of a unit is which slot of its parent. The criterion needs nothing of the
data but the cross-products of the innermost slots with each other and with the response.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from campaign.methods.nested_design import (
    BoolArray,
    FloatArray,
    IntArray,
    NestedModel,
    ScaledColumns,
    scale_columns,
)
from campaign.methods.nested_many_slots import ManySlots, has_many_slots, many_slots
from campaign.methods.nested_transfer import Block, Step, Transfer


@dataclass(frozen=True)
class TermRows:
    """Which effect each row of the data belongs to.

    Attributes
    ----------
    unit, copy
        (N,) unit number of the term's level and copy number within it, from 0.
    units, copies
        How many there are.
    """

    unit: IntArray
    copy: IntArray
    units: int
    copies: int


@dataclass(frozen=True)
class Compression:
    """A model reduced to what its criterion needs.

    Attributes
    ----------
    steps
        Levels from the innermost outwards.
    products
        (m, m, units) cross-products of the innermost slots, the response (less its least-squares fit) last.
    bases
        (m − 1, N) the innermost slots' columns, rows in `order`.
    order, starts
        Rows sorted by innermost unit; where a unit begins.
    columns
        Scaled columns of the model, rows as the user gave them.
    term_rows
        For each term, the effect each row belongs to (rows as given).
    unit_codes
        For each level of the model that carries a term: name → (units, depth) codes of the unit and its outer
        units.
    least_squares
        (p,) least-squares coefficients in scaled columns that were taken off the response.
    rows, fixed
        N and p.
    """

    steps: tuple[Step, ...]
    products: FloatArray
    bases: FloatArray
    order: IntArray
    starts: IntArray
    columns: ScaledColumns
    term_rows: tuple[TermRows, ...]
    unit_codes: dict[str, IntArray]
    least_squares: FloatArray
    rows: int
    fixed: int

    @cached_property
    def many_slots(self) -> ManySlots | None:
        """The model made ready for the elimination of units with many slots; None where they have few."""
        if not has_many_slots(self.steps, len(self.products)):
            return None
        return many_slots(self.steps, self.products)

    @cached_property
    def total(self) -> float:
        """Sum of squares of the response about its least-squares fit."""
        return float(self.products[-1, -1].sum())

    def products_of(self, responses: FloatArray) -> FloatArray:
        """Cross-products for other responses with the same design.

        Parameters
        ----------
        responses
            (N, R), rows as the user gave them.

        Returns
        -------
        FloatArray
            (m, m, R · units), units running fastest.
        """
        y = np.ascontiguousarray(responses[self.order].T)
        m, _, units = self.products.shape
        out = np.empty((m, m, y.shape[0], units))
        out[:] = self.products[:, :, None, :]
        for k in range(m - 1):
            out[k, -1] = out[-1, k] = np.add.reduceat(y * self.bases[k], self.starts, axis=1)
        out[-1, -1] = np.add.reduceat(y * y, self.starts, axis=1)
        return out.reshape(m, m, -1)


@dataclass
class _Column:
    """A column of the whole model while the slots are sought."""

    vector: FloatArray
    depth: int
    """Depth of the level it is random at; −1 for a fixed column."""
    active: list[BoolArray] = field(default_factory=list)
    slot: list[int] = field(default_factory=list)
    factor: list[FloatArray] = field(default_factory=list)
    """Per level, innermost first: where it is active, its slot, and the slot's multiple in each unit."""


@dataclass
class _Slot:
    vector: FloatArray
    active: BoolArray
    own: bool
    members: list[_Column]


@dataclass(frozen=True)
class _Units:
    """Units of one level: each row's unit, their number, the parent of each and its codes."""

    name: str
    of_row: IntArray
    count: int
    parent: IntArray
    codes: IntArray


def compress(model: NestedModel) -> Compression:
    """Reduce a checked model to cross-products per innermost unit.

    Raises
    ------
    ValueError
        The fixed columns or the columns of a random effect are linearly dependent.
    """
    columns = scale_columns(model)
    least_squares = _least_squares(columns.fixed, model)
    residual = model.response - columns.fixed @ least_squares
    levels = _levels_with_terms(model)
    order, starts = _sorted_rows(levels, len(residual))
    term_rows = tuple(_term_rows(model, number, levels) for number in range(len(model.terms)))
    random, fixed = _all_columns(model, columns, term_rows, levels, order)
    steps, bases = _find_steps(model, levels, term_rows, random, fixed, order, starts)
    return Compression(
        steps=steps,
        products=_cross_products(bases, residual[order], starts),
        bases=bases,
        order=order,
        starts=starts,
        columns=columns,
        term_rows=term_rows,
        unit_codes={level.name: level.codes for level in levels},
        least_squares=least_squares,
        rows=len(residual),
        fixed=columns.fixed.shape[1],
    )


def _least_squares(fixed: FloatArray, model: NestedModel) -> FloatArray:
    square = fixed.T @ fixed
    size = np.sqrt(np.diag(square))
    size = np.where(size > 0.0, size, 1.0)
    values, vectors = np.linalg.eigh(square / np.outer(size, size))
    if values[0] < 1e-11:
        worst = np.abs(vectors[:, 0])
        names = [
            name for name, weight in zip(model.fixed_names, worst, strict=True) if weight > 0.1 * worst.max()
        ]
        raise ValueError(f"fixed columns are linearly dependent: {', '.join(names)}")
    inverse = vectors @ ((vectors / values).T)
    return np.asarray(inverse @ (fixed.T @ model.response / size) / size)


def _levels_with_terms(model: NestedModel) -> list[_Units]:
    """Number the units of every level that carries a random effect, sorted by their parents."""
    used = {term.level for term in model.terms}
    levels: list[_Units] = []
    of_row = np.zeros(len(model.response), dtype=np.int64)
    codes_so_far = np.zeros((1, 0), dtype=np.int64)
    parent_of_row = of_row
    for name, codes in model.levels:
        previous = of_row
        of_row, first = _number(of_row, np.asarray(codes, dtype=np.int64))
        codes_so_far = np.column_stack([codes_so_far[previous[first]], np.asarray(codes)[first]])
        if name in used:
            levels.append(_Units(name, of_row, len(first), parent_of_row[first], codes_so_far))
            parent_of_row = of_row
    return levels


def _number(outer: IntArray, codes: IntArray) -> tuple[IntArray, IntArray]:
    """Number the distinct pairs (outer, code), sorted by outer; also the first row of each."""
    low = codes.min()
    key = outer * (codes.max() - low + 1) + (codes - low)
    if (key[1:] >= key[:-1]).all():
        new = np.concatenate([[True], key[1:] != key[:-1]])
        return np.cumsum(new) - 1, np.flatnonzero(new)
    _, first, number = np.unique(key, return_index=True, return_inverse=True)
    return number.astype(np.int64), first.astype(np.int64)


def _sorted_rows(levels: list[_Units], rows: int) -> tuple[IntArray, IntArray]:
    if not levels:
        return np.arange(rows), np.zeros(1, dtype=np.int64)
    inner = levels[-1].of_row
    order = np.arange(rows) if (inner[1:] >= inner[:-1]).all() else np.argsort(inner, kind="stable")
    return order, np.searchsorted(inner[order], np.arange(levels[-1].count))


def _term_rows(model: NestedModel, number: int, levels: list[_Units]) -> TermRows:
    term = model.terms[number]
    level = next(level for level in levels if level.name == term.level)
    if term.copies is None:
        return TermRows(level.of_row, np.zeros_like(level.of_row), level.count, 1)
    codes, copy = np.unique(np.asarray(term.copies), return_inverse=True)
    pair, first = _number(level.of_row, copy.astype(np.int64))
    in_unit = np.bincount(level.of_row[first], minlength=level.count)
    if len(codes) > 2 * in_unit.max():
        begins = np.concatenate([[0], np.cumsum(in_unit)[:-1]])
        copy = pair - begins[level.of_row]
        return TermRows(level.of_row, copy, level.count, int(in_unit.max()))
    return TermRows(level.of_row, copy.astype(np.int64), level.count, len(codes))


def _all_columns(
    model: NestedModel,
    columns: ScaledColumns,
    term_rows: tuple[TermRows, ...],
    levels: list[_Units],
    order: IntArray,
) -> tuple[list[list[_Column]], list[_Column]]:
    """Every random column (term by term, copy by copy) and every fixed column, rows sorted."""
    depth = {level.name: k for k, level in enumerate(levels)}
    random: list[list[_Column]] = []
    known: dict[int, list[FloatArray]] = {}
    for term, scaled, rows in zip(model.terms, columns.terms, term_rows, strict=True):
        vectors = known.setdefault(id(scaled), [np.ascontiguousarray(column[order]) for column in scaled.T])
        copy = rows.copy[order]
        mine = []
        for number in range(rows.copies):
            for vector in vectors:
                single = vector if rows.copies == 1 else np.where(copy == number, vector, 0.0)
                mine.append(_Column(single, depth[term.level]))
        random.append(mine)
    return random, [_Column(np.ascontiguousarray(column[order]), -1) for column in columns.fixed.T]


def _find_steps(
    model: NestedModel,
    levels: list[_Units],
    term_rows: tuple[TermRows, ...],
    random: list[list[_Column]],
    fixed: list[_Column],
    order: IntArray,
    starts: IntArray,
) -> tuple[tuple[Step, ...], FloatArray]:
    if not levels:
        return (), np.array([column.vector for column in fixed])
    slots_by_depth = []
    for depth in reversed(range(len(levels))):
        level = levels[depth]
        begins = (
            starts
            if depth == len(levels) - 1
            else np.searchsorted(level.of_row[order], np.arange(level.count))
        )
        mine = [c for columns in random for c in columns if c.depth == depth]
        outer = [c for columns in random for c in columns if c.depth < depth]
        slots_by_depth.append(_find_slots(mine, outer + fixed, level.of_row[order], begins))
    steps = []
    for inward, (depth, slots) in enumerate(zip(reversed(range(len(levels))), slots_by_depth, strict=True)):
        last = depth == 0
        parents = (
            [[column] for column in fixed] if last else [slot.members for slot in slots_by_depth[inward + 1]]
        )
        blocks, places = _blocks(model, levels[depth].name, term_rows, random, inward)
        steps.append(
            Step(
                level=levels[depth].name,
                units=levels[depth].count,
                random=places,
                blocks=blocks,
                transfers=_transfers(levels[depth], parents, inward, slots, last),
                parent_units=1 if last else levels[depth - 1].count,
                parent_slots=len(parents) + 1,
            )
        )
    return tuple(steps), np.array([slot.vector for slot in slots_by_depth[0]])


def _find_slots(own: list[_Column], others: list[_Column], of_row: IntArray, starts: IntArray) -> list[_Slot]:
    """The distinct columns of a level: a column joins a slot that it is a multiple of in each active unit."""
    slots: list[_Slot] = []
    for number, column in enumerate(own + others):
        is_own = number < len(own)
        active = np.logical_or.reduceat(column.vector != 0.0, starts)
        factor = np.ones(len(starts))
        if is_own:
            place = next((k for k, s in enumerate(slots) if _same_vector(s.vector, column.vector)), None)
        else:
            place, factor = _multiple_of_slot(slots, column.vector, active, of_row, starts)
            if place is None:
                place = _free_slot(slots, column, active)
        if place is None:
            place = len(slots)
            slots.append(_Slot(column.vector, active, is_own, []))
        slots[place].members.append(column)
        column.active.append(active)
        column.slot.append(place)
        column.factor.append(factor)
    return slots


def _same_vector(a: FloatArray, b: FloatArray) -> bool:
    return a is b or np.array_equal(a, b)


def _multiple_of_slot(
    slots: list[_Slot], vector: FloatArray, active: BoolArray, of_row: IntArray, starts: IntArray
) -> tuple[int | None, FloatArray]:
    """The slot of which `vector` is a multiple in every active unit, and the multiples (units,)."""
    factor = np.ones(len(starts))
    if not active.any():
        return (0 if slots else None), factor
    same = next((k for k, s in enumerate(slots) if s.vector is vector), None)
    if same is not None:
        return same, factor
    rows = slice(None) if active.all() else np.flatnonzero(active[of_row])
    counts = np.diff(np.append(starts, len(vector)))[active]
    begins = np.cumsum(counts) - counts
    mine = vector[rows]
    for place, slot in enumerate(slots):
        found = _multiples(mine, slot.vector[rows], begins, counts)
        if found is not None:
            factor[active] = found
            return place, factor
    return None, factor


def _multiples(a: FloatArray, b: FloatArray, begins: IntArray, counts: IntArray) -> FloatArray | None:
    """What b must be multiplied by in each unit to be a; None where a is no multiple of b."""
    first = slice(0, counts[0])
    product, squares = a[first] @ b[first], (a[first] @ a[first]) * (b[first] @ b[first])
    if abs(product * product - squares) > 1e-10 * squares or squares == 0.0:
        return None
    squares = np.add.reduceat(b * b, begins)
    if (squares == 0.0).any():
        return None
    factor = np.add.reduceat(a * b, begins) / squares
    near = np.rint(factor)
    factor = np.where(np.abs(factor - near) < 1e-12, near, factor)
    if np.abs(a - np.repeat(factor, counts) * b).max() > 1e-13 * np.abs(a).max():
        return None
    return np.asarray(factor)


def _free_slot(slots: list[_Slot], column: _Column, active: BoolArray) -> int | None:
    """A slot whose columns are zero in every unit where this one is not; the column moves in."""
    for place, slot in enumerate(slots):
        if not slot.own and not (slot.active & active).any():
            slots[place] = _Slot(slot.vector + column.vector, slot.active | active, False, slot.members)
            return place
    return None


def _blocks(
    model: NestedModel,
    level: str,
    term_rows: tuple[TermRows, ...],
    random: list[list[_Column]],
    inward: int,
) -> tuple[tuple[Block, ...], IntArray]:
    blocks = []
    places: list[int] = []
    for number, term in enumerate(model.terms):
        if term.level == level:
            blocks.append(Block(number, term.columns.shape[1], term_rows[number].copies, len(places)))
            places += [column.slot[inward] for column in random[number]]
    return tuple(blocks), np.array(places, dtype=np.int64)


def _transfers(
    level: _Units, parents: list[list[_Column]], inward: int, slots: list[_Slot], last: bool
) -> tuple[Transfer, ...]:
    """What each unit hands to its parent: slots that hold members of the parent's slots, and multiples."""
    source = np.full((level.count, len(parents) + 1), -1, dtype=np.int64)
    scale = np.ones((level.count, len(parents) + 1))
    source[:, -1] = len(slots)
    parent = np.zeros(level.count, dtype=np.int64) if last else level.parent
    for target, members in enumerate(parents):
        for column in members:
            active = column.active[inward]
            source[active, target] = column.slot[inward]
            above = 1.0 if last else column.factor[inward + 1][parent[active]]
            scale[active, target] = column.factor[inward][active] / above
        _hand_zeros(source[:, target], members, inward, slots)
    above_units = 1 if last else int(level.parent.max()) + 1
    return tuple(_transfer(children, row, scale, parent, above_units) for children, row in _kinds(source))


def _hand_zeros(source: IntArray, members: list[_Column], inward: int, slots: list[_Slot]) -> None:
    """Where no member is active, hand over a member's slot that is zero there: fewer kinds of units."""
    for column in members:
        place = column.slot[inward]
        source[(source < 0) & ~slots[place].active] = place


def _kinds(source: IntArray) -> list[tuple[IntArray | None, IntArray]]:
    """Units grouped by what they hand over."""
    if (source == source[0]).all():
        return [(None, source[0])]
    mark = source @ np.random.default_rng(1).integers(1, 2**40, size=source.shape[1])
    _, first, kind = np.unique(mark, return_index=True, return_inverse=True)
    return [(np.flatnonzero(kind == k), source[row]) for k, row in enumerate(first)]


def _transfer(
    children: IntArray | None, source: IntArray, scale: FloatArray, parent: IntArray, parents: int
) -> Transfer:
    parent_of_child = parent if children is None else parent[children]
    starts = np.flatnonzero(np.concatenate([[True], parent_of_child[1:] != parent_of_child[:-1]]))
    counts = np.diff(np.append(starts, len(parent_of_child)))
    target = np.flatnonzero(source >= 0)
    mine = (scale if children is None else scale[children])[:, target].T
    return Transfer(
        children=children,
        starts=starts,
        parents=parent_of_child[starts],
        parent_of_child=parent_of_child,
        source=source[target],
        target=target,
        scale=None if (mine == 1.0).all() else np.ascontiguousarray(mine),
        children_each=int(counts[0]) if (counts == counts[0]).all() else 0,
        every_parent=len(starts) == parents,
    )


def _cross_products(bases: FloatArray, residual: FloatArray, starts: IntArray) -> FloatArray:
    vectors = [*bases, residual]
    out = np.empty((len(vectors), len(vectors), len(starts)))
    for i, a in enumerate(vectors):
        for j in range(i + 1):
            out[i, j] = out[j, i] = np.add.reduceat(a * vectors[j], starts)
    return out
