"""The variance that differences need beyond a known covariance: recovered, with an interval that covers."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from campaign.methods.extra_variance import extra_variance


def shared_covariance(count: int = 120) -> np.ndarray:
    """Sensors of ten lengths each that share most of their error, over a common scale."""
    sensor = np.arange(count) // 10
    return 0.04 * np.eye(count) + 0.25 * (sensor[:, None] == sensor[None, :]) + 0.01


@pytest.mark.parametrize("extra", [0.2, 0.5])
def test_the_extra_sd_comes_back_within_its_interval(extra: float) -> None:
    covariance = shared_covariance()
    root = np.linalg.cholesky(covariance + extra**2 * np.eye(len(covariance)))
    rng = np.random.default_rng(8)
    found = [extra_variance(root @ rng.standard_normal(120), covariance) for _ in range(300)]
    assert np.median([one.sd for one in found]) == pytest.approx(extra, rel=0.05)
    covered = sum(one.low <= extra <= one.high for one in found)
    low, high = stats.binom.ppf([0.0005, 0.9995], 300, 0.95)
    assert low <= covered <= high


def test_without_any_the_interval_reaches_zero() -> None:
    covariance = shared_covariance()
    root = np.linalg.cholesky(covariance)
    rng = np.random.default_rng(9)
    found = [extra_variance(root @ rng.standard_normal(120), covariance) for _ in range(300)]
    assert sum(one.low == 0.0 for one in found) >= 280
    assert np.mean([one.sd == 0.0 for one in found]) > 0.3
    assert np.mean([one.p < 0.05 for one in found]) < 0.09


def test_independent_differences_need_their_own_spread() -> None:
    differences = np.random.default_rng(1).standard_normal(400)
    found = extra_variance(differences, 1e-12 * np.eye(400))
    assert found.sd == pytest.approx(np.sqrt(np.mean(differences**2)), rel=1e-6)
    low, high = found.sd * np.sqrt(400 / stats.chi2.ppf([0.975, 0.025], 400))
    assert (found.low, found.high) == pytest.approx((low, high), rel=0.01)
    assert found.p < 1e-12
    assert found.count == 400


def test_units_do_not_matter() -> None:
    covariance = shared_covariance(40)
    differences = np.random.default_rng(2).standard_normal(40)
    one, other = extra_variance(differences, covariance), extra_variance(1e3 * differences, 1e6 * covariance)
    assert other.sd == pytest.approx(1e3 * one.sd, rel=1e-5)
    assert other.high == pytest.approx(1e3 * one.high, rel=1e-5)
