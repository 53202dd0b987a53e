"""Packed lists of numbers come back bit by bit, and are as short as they are said to be."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from campaign.pages.packed_numbers import packed, unpacked

STEPS = st.integers(-(2**40), 2**40) | st.integers(-100, 100) | st.none()


@given(st.lists(STEPS, min_size=1, max_size=40), st.integers(0, 6))
def test_rounded_numbers_and_gaps_come_back_exactly(whole: list[int | None], decimals: int) -> None:
    values = [None if n is None else round(n / 10**decimals, decimals) for n in whole]
    text = packed(values)
    if max((abs(v) for v in values if v is not None), default=0.0) < 1e6:
        assert text is not None
    if text is not None:
        assert unpacked(text) == values


@given(st.lists(st.floats(allow_infinity=False, allow_nan=False), min_size=1, max_size=8))
def test_numbers_of_any_size_come_back_exactly_or_are_left_to_be_written_out(values: list[float]) -> None:
    text = packed(values)
    assert text is None or unpacked(text) == values


def test_what_is_no_list_of_numbers_is_left_to_be_written_out() -> None:
    assert packed(["rising", "falling"]) is None  # type: ignore[list-item]
    assert packed([]) is None
    assert packed([math.inf, 1.0]) is None
    assert packed([math.pi]) is None


def test_steps_take_the_letters_that_the_text_says() -> None:
    """By hand: 1.5 is 15 tenths, the step 2 × 15 = 30 = one letter, place 30; back to 0: 2 × 15 + 1 = 31."""
    assert packed([1.5, 0.0, None, 0.0]) == "Bef.A"
    assert packed([16.0]) == "AgB"
    assert packed([None]) == "A."


def test_a_curve_of_five_digits_takes_less_than_half_of_its_plain_text() -> None:
    places = np.round(np.sin(np.linspace(0, 6, 500)) * 40, 4).tolist()
    text = packed(places)
    assert text is not None
    assert len(text) < 0.45 * len(str(places).replace(" ", ""))
