"""Scatter as a function of the reference, and what weighting by it would gain."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods.reading_weights import scatter_against, slope_error_ratio


def test_scatter_that_grows_is_found():
    rng = np.random.default_rng(31)
    x = np.tile(np.linspace(0.0, 0.4, 9), 300)
    found = scatter_against(x, rng.normal(0.0, 1.0, len(x)) * 0.1 * np.exp(2.0 * x))
    assert np.sqrt(found[8] / found[0]) == pytest.approx(np.exp(0.8), rel=0.1)
    assert found[4] == pytest.approx((0.1 * np.exp(0.4)) ** 2, rel=0.1)


def test_even_scatter_gains_nothing():
    x = np.linspace(0.0, 0.4, 9)
    assert slope_error_ratio(x, np.full(9, 0.3)) == pytest.approx(1.0)
    assert scatter_against(x[:3], np.ones(3)).tolist() == [1.0, 1.0, 1.0]
    assert scatter_against(x, np.zeros(9)).tolist() == [0.0] * 9


def test_the_gain_is_that_of_simulated_slopes():
    rng = np.random.default_rng(32)
    x = np.linspace(0.0, 1.0, 9)
    sd = 0.05 + 2.0 * x
    y = sd * rng.normal(0.0, 1.0, (40000, 9))
    dx = x - x.mean()
    plain = y @ dx / (dx @ dx)
    w = 1 / sd**2
    centred = x - w @ x / w.sum()
    weighted = y @ (w * centred) / (w @ centred**2)
    assert slope_error_ratio(x, sd**2) == pytest.approx(weighted.std() / plain.std(), rel=0.02)
