"""When a run is settled, and who survives."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods.conditioning import cycle_noise, settled_from
from campaign.methods.survival import product_limit


def series(cycles: int, start: float, decay: float, noise: float, seed: int = 0) -> np.ndarray:
    n = np.arange(cycles)[:, np.newaxis]
    rng = np.random.default_rng(seed)
    return 10.0 + start * np.exp(-n / decay) * np.array([[1.0, 0.5, 0.2]]) + rng.normal(0, noise, (cycles, 3))


def test_a_first_cycle_that_differs_is_told_from_the_rest() -> None:
    values = np.full((10, 3), 10.0)
    values[0] += 2.0
    assert settled_from(values, 100.0) == 1


def test_settling_is_later_the_longer_it_takes() -> None:
    found = [settled_from(series(40, 5.0, decay, 0.01), 100.0) for decay in (1.0, 3.0, 8.0)]
    assert found == sorted(found)
    # exact: the change per cycle over five cycles falls below 0.2 from about decay · ln(5 / (0.2 decay)) on
    assert found[0] is not None
    assert found[2] is not None
    assert abs(found[2] - 8.0 * np.log(5.0 / (0.2 * 8.0))) < 3.0


def test_noise_alone_is_no_change() -> None:
    first = [settled_from(series(12, 0.0, 1.0, 0.5, seed), 100.0) for seed in range(50)]
    assert sum(found == 0 for found in first) >= 45


def test_a_run_that_moves_to_its_end_does_not_settle() -> None:
    drift = 10.0 + np.arange(12.0)[:, np.newaxis] * np.array([[1.0, 0.0, 0.0]])
    assert settled_from(drift, 100.0) is None
    assert settled_from(np.full((2, 3), 1.0), 100.0) is None
    assert settled_from(np.full((9, 3), 1.0), 0.0) is None


def test_cycles_without_a_value_are_passed_over() -> None:
    values = np.full((10, 3), 10.0)
    values[0] += 2.0
    values[1] = np.nan
    assert settled_from(values, 100.0) == 2


def test_noise_from_cycle_to_cycle_is_found_under_a_trend() -> None:
    rng = np.random.default_rng(1)
    values = np.arange(4000.0)[:, np.newaxis] * 0.3 + rng.normal(0.0, 2.0, (4000, 2))
    assert cycle_noise(values) == pytest.approx([2.0, 2.0], rel=0.05)


def test_survival_of_the_6_mp_patients() -> None:
    # Freireich et al. (1963), the standard example (D. R. Cox & D. Oakes, Analysis of Survival Data, 1984,
    # table 1.1); limits as R's survival package gives them with conf.type = "log-log"
    failed = [6, 6, 6, 7, 10, 13, 16, 22, 23]
    censored = [6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35]
    found = product_limit(np.array(failed + censored, float), np.array([True] * 9 + [False] * 12))
    assert found.time.tolist() == [6, 7, 10, 13, 16, 22, 23, 35]
    assert found.at_risk.tolist() == [21, 17, 15, 12, 11, 7, 6, 5]
    assert found.share[:-1] == pytest.approx([0.857, 0.807, 0.753, 0.690, 0.627, 0.538, 0.448], abs=5e-4)
    assert found.low[:-1] == pytest.approx([0.620, 0.563, 0.503, 0.432, 0.368, 0.268, 0.188], abs=5e-4)
    assert found.high[:-1] == pytest.approx([0.952, 0.923, 0.889, 0.849, 0.805, 0.747, 0.680], abs=5e-4)
    assert found.share[-1] == found.share[-2]


def test_where_none_failed_the_lower_limit_is_the_exact_one() -> None:
    found = product_limit(np.full(10, 5000.0), np.zeros(10, bool))
    assert (found.share.tolist(), found.high.tolist()) == ([1.0], [1.0])
    # Clopper and Pearson: 0 of 10, two-sided 95 %: upper limit of the share that fails 0.3085
    assert 1.0 - found.low[0] == pytest.approx(0.3085, abs=5e-5)


def test_where_all_failed_nothing_survives() -> None:
    found = product_limit(np.array([1.0, 2.0, 3.0]), np.ones(3, bool))
    assert found.share[-1] == 0.0
    assert 0.0 == found.low[-1] < found.high[-1] < 1.0
