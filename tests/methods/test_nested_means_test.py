"""Tests of groups and members against a published analysis of variance and the size they claim."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from campaign.methods.nested_means_test import test_groups as groups_alike
from campaign.methods.nested_means_test import test_members as members_alike

DYESTUFF = np.array(
    [
        [1545, 1440, 1440, 1520, 1580],
        [1540, 1555, 1490, 1560, 1495],
        [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545],
        [1595, 1630, 1515, 1635, 1625],
        [1520, 1455, 1450, 1480, 1445],
    ],
    dtype=float,
)
"""Yield of dyestuff in grams, five samples of six batches: Davies & Goldsmith (1972), table 6.1."""


def test_groups_of_the_dyestuff_data():
    # Davies & Goldsmith (1972), table 6.2: mean squares 11271.5 (5 df) and 2451.25 (24 df)
    found = groups_alike(DYESTUFF.ravel(), np.repeat(np.arange(6), 5))
    assert found.statistic == pytest.approx(11271.5 / 2451.25, rel=1e-12)
    assert found.freedom == (5.0, 24.0)
    assert found.p == pytest.approx(float(stats.f.sf(4.59826619, 5, 24)), rel=1e-6)


def test_members_against_a_known_error():
    # two groups of two means; within-group mean square ((1−0)²/2 + (3−5)²/2)/2 = 1.25 over 0.5
    found = members_alike(np.array([0.0, 1.0, 5.0, 3.0]), np.array([0, 0, 1, 1]), np.full(4, 0.5), 6.0)
    assert found.statistic == pytest.approx(2.5)
    assert found.freedom == (2.0, 6.0)


def test_designs_that_carry_no_test():
    assert math.isnan(groups_alike(np.array([1.0, 2.0]), np.array([0, 0])).p)
    assert math.isnan(groups_alike(np.array([1.0, 2.0]), np.array([0, 1])).p)
    assert math.isnan(members_alike(np.array([1.0, 2.0]), np.array([0, 1]), np.full(2, 0.1), 4.0).p)
    assert math.isnan(members_alike(np.array([1.0, 2.0]), np.array([0, 0]), np.full(2, np.nan), 0.0).p)
