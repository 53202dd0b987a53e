"""Holm's adjustment against statsmodels', and a small example worked by hand."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from statsmodels.stats.multitest import multipletests

from campaign.methods.holm import holm_adjusted


def test_by_hand() -> None:
    # 0.01 × 4, 0.02 × 3, 0.03 × 2, then 0.05 × 1, which is not below the one before it
    assert holm_adjusted([0.03, 0.01, 0.05, 0.02]) == pytest.approx([0.06, 0.04, 0.06, 0.06])


@given(st.lists(st.floats(0.0, 1.0), min_size=1, max_size=30))
def test_as_statsmodels(p: list[float]) -> None:
    np.testing.assert_allclose(holm_adjusted(p), multipletests(p, method="holm")[1], rtol=1e-12)


def test_no_tests_at_all() -> None:
    assert holm_adjusted([]).shape == (0,)
