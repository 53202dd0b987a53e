"""The nested analysis of variance against SAS, the GUM, and its own promises."""

import numpy as np
import pytest

from campaign.methods.analysis_of_variance import nested_analysis_of_variance

# expected.json, nested.sas_nested: rows (from 1) removed from the EP05 set
REMOVED = [11, 12, 17, 37, 45, 56, 57, 68]


def ep05(nested, removed=()):
    table = nested.table("dataep05a2_1", "nested").drop(index=[row - 1 for row in removed])
    levels = [("day", nested.codes(table["day"])), ("run", nested.codes(table["run"]))]
    return nested_analysis_of_variance(table["y"].to_numpy(float), levels)


def test_ep05_balanced(nested):
    table = ep05(nested)
    # SAS 9.2 PROC NESTED (R package VCA, UnitTests): total, day, run, error
    assert [table.total, *table.variances] == pytest.approx(
        [3.298986, 0.001096, 1.344492, 1.953397], abs=1e-6
    )
    assert table.balanced
    # SAS: the exact interval of the error component
    error = table.interval("error")
    assert [error.low, error.high] == pytest.approx([1.3167, 3.198], abs=1e-4)


def test_ep05_with_rows_removed(nested):
    table = ep05(nested, REMOVED)
    # SAS 9.2 PROC MIXED method=type1: total, day, run, error
    assert [table.total, *table.variances] == pytest.approx(
        [3.272031, 0.278178, 0.875624, 2.118229], abs=1e-6
    )
    assert not table.balanced
    with pytest.raises(ValueError, match="balanced"):
        table.interval("day")


def test_turnip(nested):
    data = nested.table("turnip", "nested")
    levels = [("plant", nested.codes(data["plant"])), ("leaf", data["leaf"].to_numpy())]
    table = nested_analysis_of_variance(data["calcium"].to_numpy(float), levels)
    # SAS sample NESTEX1, after Snedecor & Cochran (1967), p. 286
    assert table.sums_of_squares == pytest.approx([7.560346, 2.6302, 0.07985], abs=1e-6)
    assert table.degrees_of_freedom == pytest.approx([3, 8, 12])
    assert table.variances == pytest.approx([0.365223, 0.16106, 0.006654], abs=1e-6)


def test_oxide_by_source(nested):
    data = nested.table("oxide", "nested")
    fixed = np.column_stack([np.ones(len(data)), data["Source"] == 2])
    levels = [("lot", data["Lot"].to_numpy()), ("wafer", data["Wafer"].to_numpy())]
    table = nested_analysis_of_variance(data["Thickness"].to_numpy(float), levels, fixed)
    # expected.json, nested.oxide_generation_contrast: mean squares of source (1830.125), lot, wafer, error
    assert table.mean_squares == pytest.approx([1199.199074, 120.1666667, 12.5694444], abs=1e-6)
    assert table.degrees_of_freedom == pytest.approx([6, 16, 48])
    assert table.balanced


def test_gum_h5_zener_standard(nested):
    days = nested.table("h5_zener", "nested")
    # five readings a day with the printed mean and SD (µV from 10 V) stand in for the unprinted readings
    pattern = np.array([-1.0, -1.0, 0.0, 1.0, 1.0])
    readings = (days["mean_V"].to_numpy()[:, None] - 10.0) * 1e6 + days["sd_uV"].to_numpy()[:, None] * pattern
    table = nested_analysis_of_variance(readings.ravel(), [("day", np.repeat(np.arange(10), 5))])
    # JCGM 100:2008, H.5.2.5: s_a 128 µV, s_b 85 µV, F = 2.25 from rounded values (2.2615 unrounded)
    assert np.sqrt(table.mean_squares) == pytest.approx([128, 85], abs=0.6)
    test = table.test("day")
    assert test.statistic == pytest.approx(2.2615, abs=1e-4)
    assert test.degrees_of_freedom == (9.0, 40.0)
    assert 0.025 < test.p < 0.05  # F_0.95 = 2.12, F_0.975 = 2.45
    assert np.sqrt(table.variance("day")) == pytest.approx(43, abs=0.6)


def test_unbalanced_estimates_are_unbiased():
    random = np.random.default_rng(5)
    module = np.repeat(np.arange(5), [2, 5, 9, 3, 6])
    sensor = np.arange(25) // 2
    sensor = np.unique(np.column_stack([module, sensor]), axis=0, return_inverse=True)[1].ravel()
    rows = np.repeat(np.arange(25), random.integers(1, 4, 25))
    module, sensor = module[rows], sensor[rows]
    x = random.standard_normal((len(rows), 1))
    fixed = np.column_stack([np.ones(len(rows)), x])
    draws = []
    for _ in range(400):
        y = 2.0 * random.standard_normal(5)[module] + random.standard_normal(sensor.max() + 1)[sensor]
        y += 0.5 * random.standard_normal(len(rows)) + 3.0 * x[:, 0]
        draws.append(
            nested_analysis_of_variance(y, [("module", module), ("sensor", sensor)], fixed).variances
        )
    mean, error = np.mean(draws, axis=0), np.std(draws, axis=0) / 20.0
    assert np.abs(mean - [4.0, 1.0, 0.25]) == pytest.approx(0.0, abs=4.0 * error.max())
    assert (np.abs(mean - [4.0, 1.0, 0.25]) < 4.0 * error).all()


def test_modified_large_sample_intervals_cover_the_truth():
    random = np.random.default_rng(6)
    module, sensor = np.repeat(np.arange(6), 20), np.repeat(np.arange(24), 5)
    hits = np.zeros(3)
    for _ in range(400):
        y = random.standard_normal(6)[module] + 0.7 * random.standard_normal(24)[sensor]
        y += 0.5 * random.standard_normal(120)
        table = nested_analysis_of_variance(y, [("module", module), ("sensor", sensor)])
        intervals = [table.interval("module"), table.interval("sensor"), table.total_interval()]
        hits += [i.low <= t <= i.high for i, t in zip(intervals, (1.0, 0.49, 1.74), strict=True)]
    # nominal 95 %; 400 simulations: within 92 and 98 %
    assert (hits >= 0.92 * 400).all()
    assert (hits <= 0.98 * 400).all()


def test_a_level_without_freedom_is_refused():
    with pytest.raises(ValueError, match="'run'"):
        nested_analysis_of_variance(
            np.arange(6.0), [("sensor", np.arange(6) // 2), ("run", np.arange(6) // 2)]
        )
