"""Lines and squares from the sums of cells, against the readings themselves one by one."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods.cell_sums import lines_without, squares_of_errors, stacked, sums_of_cells


@pytest.mark.parametrize("seed", range(3))
def test_lines_and_errors_are_those_of_the_readings(seed: int) -> None:
    generator = np.random.default_rng(seed)
    cell = np.repeat(np.arange(12), 5)
    group, left_out = np.arange(12) // 6, np.arange(12) // 2
    x = generator.normal(size=60)
    y = 3.0 * x[:, None] + generator.normal(size=(60, 4))
    sums = sums_of_cells(cell, 12, x, y, np.ones(60, dtype=bool))
    intercept, slope = lines_without(sums, group, left_out, float(np.var(x)))
    squares = squares_of_errors(sums, intercept, slope)
    for k in range(12):
        others = (group[cell] == group[k]) & (left_out[cell] != left_out[k])
        wanted = np.polyfit(x[others], y[others], 1)
        np.testing.assert_allclose([slope[k], intercept[k]], wanted, rtol=1e-10, atol=1e-12)
        own = cell == k
        errors = (y[own] - wanted[1]) / wanted[0] - x[own][:, None]
        np.testing.assert_allclose(squares[k], (errors**2).sum(axis=0), rtol=1e-9)


def test_no_line_where_nothing_remains() -> None:
    cell, x = np.repeat(np.arange(2), 3), np.tile([0.0, 1.0, 2.0], 2)
    sums = sums_of_cells(cell, 2, x, x[:, None], np.ones(6, dtype=bool))
    slope = lines_without(sums, np.array([0, 1]), np.array([0, 1]), float(np.var(x)))[1]
    assert np.isnan(slope).all()


def test_taking_readings_away_and_rescaling_are_those_of_the_readings() -> None:
    generator = np.random.default_rng(5)
    cell, x, y = np.repeat(np.arange(3), 4), generator.normal(size=12), generator.normal(size=(12, 2))
    first = np.tile([True, False, False, False], 3)
    zero, unit = generator.normal(size=(3, 2)), np.full((3, 2), 2.5)
    whole = sums_of_cells(cell, 3, x, y, np.ones(12, dtype=bool))
    found = whole.without(sums_of_cells(cell, 3, x, y, first)).rescaled(zero, unit)
    wanted = sums_of_cells(cell, 3, x, (y - zero[cell]) / unit[cell], ~first)
    for name in ("n", "x", "xx", "y", "xy", "yy"):
        np.testing.assert_allclose(getattr(found, name), getattr(wanted, name), rtol=1e-9, atol=1e-12)


def test_stacked_cells_stand_one_after_another() -> None:
    x, y = np.array([1.0, 2.0]), np.array([[3.0], [4.0]])
    one = sums_of_cells(np.array([0, 1]), 2, x, y, np.ones(2, dtype=bool))
    assert stacked([one, one]).y[:, 0].tolist() == [3.0, 4.0, 3.0, 4.0]
