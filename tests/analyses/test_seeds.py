"""Seeds follow the data, and not the last digit that a machine happens to add up to."""

from __future__ import annotations

import math

import pandas as pd

from campaign.analyses.seeds import seed_from

NAMES = pd.Series(["M01", "M02"])
VALUES = pd.Series([0.1, -math.pi])


def test_the_same_data_give_the_same_seed_though_a_last_digit_differs() -> None:
    seed = seed_from(["line", NAMES], [VALUES])
    assert 0 <= seed < 2**64
    assert seed_from(["line", NAMES], [VALUES.map(lambda value: math.nextafter(value, 9.0))]) == seed
    assert seed_from(["line", NAMES.copy()], [VALUES.copy()]) == seed


def test_other_data_give_another_seed() -> None:
    seeds = {
        seed_from(["line", NAMES], [VALUES]),
        seed_from(["lines", NAMES], [VALUES]),
        seed_from(["line", NAMES[::-1]], [VALUES]),
        seed_from(["line", NAMES], [VALUES * (1 + 1e-8)]),
        seed_from(["line", NAMES], [VALUES.where(VALUES > 0)]),
    }
    assert len(seeds) == 5
