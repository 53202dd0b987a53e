"""Least-squares lines, and squares about them, from the sums of cells of readings.

A cell is the finest unit that any procedure keeps together: a run. Lines of whatever larger units, with
whatever left out, and the sums of squares about them, follow from six sums a cell: n, Σx, Σx², Σy, Σxy, Σy².
Carrying a procedure out on hundreds of drawn campaigns then costs arithmetic on runs, not on readings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import sparse

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class CellSums:
    """Sums over the readings of every cell.

    Attributes
    ----------
    n, x, xx
        Shape (cells,): count, Σx, Σx².
    y, xy, yy
        Shape (cells, campaigns): Σy, Σxy, Σy².
    """

    n: FloatArray
    x: FloatArray
    xx: FloatArray
    y: FloatArray
    xy: FloatArray
    yy: FloatArray

    def without(self, other: CellSums) -> CellSums:
        """Return the sums with the readings of *other* taken away."""
        return CellSums(*(mine - theirs for mine, theirs in zip(self._parts, other._parts, strict=True)))

    def of_campaigns(self, which: slice) -> CellSums:
        """Return the sums of some of the campaigns."""
        some = (part[:, which] for part in (self.y, self.xy, self.yy))
        return CellSums(self.n, self.x, self.xx, *some)

    def rescaled(self, zero: FloatArray, unit: FloatArray) -> CellSums:
        """Return the sums for (y − zero)/unit, both (cells, campaigns)."""
        n, x = self.n[:, np.newaxis], self.x[:, np.newaxis]
        y = self.y - n * zero
        xy = self.xy - x * zero
        yy = self.yy - zero * (self.y + y)
        return CellSums(self.n, self.x, self.xx, y / unit, xy / unit, yy / unit**2)

    @property
    def _parts(self) -> tuple[FloatArray, ...]:
        return self.n, self.x, self.xx, self.y, self.xy, self.yy


_AT_ONCE = 1_000_000
"""Values that are added up together: so much is copied at a time."""


def sums_of_cells(cell: IntArray, cells: int, x: FloatArray, y: FloatArray, rows: BoolArray) -> CellSums:
    """Add up the readings of every cell.

    Parameters
    ----------
    cell
        Shape (readings,), cell of each reading.
    cells
        How many cells there are.
    x, y
        Shape (readings,) and (readings, campaigns). Both should be centred: squares are added up.
    rows
        Shape (readings,), which readings count.
    """
    which = np.flatnonzero(rows)
    own, at = cell[which], np.arange(len(which))
    here = x[which]
    shape = (cells, len(which))
    added = sparse.csr_array((np.ones(len(which)), (own, at)), shape=shape)
    weighted = sparse.csr_array((here, (own, at)), shape=shape)
    sums = [np.empty((cells, y.shape[1])) for _ in range(3)]
    step = max(_AT_ONCE // max(len(which), 1), 1)
    for start in range(0, y.shape[1], step):
        some = slice(start, start + step)
        values = y[which, some]
        for total, product in zip(sums, (added @ values, weighted @ values, added @ values**2), strict=True):
            total[:, some] = np.asarray(product)
    return CellSums(
        n=np.bincount(own, minlength=cells).astype(float),
        x=np.bincount(own, here, minlength=cells).astype(float),
        xx=np.bincount(own, here**2, minlength=cells).astype(float),
        y=sums[0],
        xy=sums[1],
        yy=sums[2],
    )


def stacked(parts: Sequence[CellSums]) -> CellSums:
    """Return the sums of several sets of cells one after another."""
    return CellSums(*(np.concatenate(same) for same in zip(*(part._parts for part in parts), strict=True)))


def side_by_side(first: CellSums, second: CellSums) -> CellSums:
    """Return the sums of two sets of campaigns of the same cells and the same x."""
    both = zip((first.y, first.xy, first.yy), (second.y, second.xy, second.yy), strict=True)
    return CellSums(first.n, first.x, first.xx, *(np.hstack(parts) for parts in both))


def lines_without(
    sums: CellSums, group: IntArray, left_out: IntArray, variance_of_x: float
) -> tuple[FloatArray, FloatArray]:
    """Return, for every cell, the line of its group without its unit of *left_out*.

    Parameters
    ----------
    sums
        Sums of the readings that make lines.
    group, left_out
        Shape (cells,): whose line, and what of it is left out.
    variance_of_x
        Of all readings: what x must vary by, in proportion, for a line.

    Returns
    -------
    tuple
        Intercept and slope, shape (cells, campaigns), NaN where fewer than two values of x remain.
    """
    groups, whole = np.unique(group, return_inverse=True)
    pair = np.unique(whole * (int(left_out.max()) + 1) + left_out, return_inverse=True)[1].ravel()
    whole = whole.ravel()
    owner = np.zeros(int(pair.max()) + 1, dtype=np.int64)
    owner[pair] = whole
    n, x, xx, y, xy = (
        _added(part, whole, len(groups))[owner] - _added(part, pair, len(owner))
        for part in (sums.n, sums.x, sums.xx, sums.y, sums.xy)
    )
    determinant = n * xx - x**2
    sound = determinant > 1e-9 * np.maximum(n, 1.0) ** 2 * max(variance_of_x, 1e-300)
    over = np.where(sound, determinant, np.nan)[:, np.newaxis]
    n, x, xx = n[:, np.newaxis], x[:, np.newaxis], xx[:, np.newaxis]
    return ((xx * y - x * xy) / over)[pair], ((n * xy - x * y) / over)[pair]


def squares_of_errors(
    sums: CellSums, intercept: FloatArray, slope: FloatArray, x_zero: FloatArray | None = None
) -> FloatArray:
    """Return Σ((y − intercept)/slope − (x − x_zero))² of every cell, shape (cells, campaigns)."""
    n, x, xx = sums.n, sums.x, sums.xx
    if x_zero is not None:
        n, x, xx = n, x - n * x_zero, xx - 2 * x * x_zero + n * x_zero**2
    xy = sums.xy if x_zero is None else sums.xy - sums.y * x_zero[:, np.newaxis]
    n, x, xx = n[:, np.newaxis], x[:, np.newaxis], xx[:, np.newaxis]
    about = sums.yy - intercept * (2 * sums.y - n * intercept)
    product = xy - intercept * x
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray((about / slope - 2 * product) / slope + xx)


def _added(values: FloatArray, code: IntArray, count: int) -> FloatArray:
    added = sparse.csr_array((np.ones(len(code)), (code, np.arange(len(code)))), shape=(count, len(code)))
    return np.asarray(added @ values)
