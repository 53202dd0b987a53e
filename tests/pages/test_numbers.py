"""Numbers as text: published rounding first, then what must never show."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.pages import numbers

# JCGM 100:2008 (GUM), source beside each value.
GUM = [
    # 7.2.4: mS = (100,021 47 ± 0,000 79) g, expanded with k = 2,26 from u = 0,35 mg
    (100.02147, 0.00079, "g", "100.02147 ± 0.00079 g"),
    # 7.2.6: with u = 27 mΩ, y = 10,057 62 Ω should be rounded to 10,058 Ω
    (10.05762, 0.027, "Ω", "10.058 ± 0.027 Ω"),
    # H.1.7: l = 50,000 838 mm, combined standard uncertainty 32 nm
    (50.000838, 0.000032, "mm", "50.000838 ± 0.000032 mm"),
    # H.2.3: R = 127,732 Ω (0,071), X = 219,847 Ω (0,295), Z = 254,260 Ω (0,236), here to two digits
    (127.732, 0.071, "Ω", "127.732 ± 0.071 Ω"),
    (219.847, 0.295, "Ω", "219.85 ± 0.30 Ω"),
    (254.260, 0.236, "Ω", "254.26 ± 0.24 Ω"),
]


def narrow(text: str) -> str:
    return text.replace(numbers.NARROW_SPACE, " ")


@pytest.mark.parametrize(("value", "uncertainty", "unit", "expected"), GUM)
def test_published_examples_keep_two_digits_of_the_uncertainty(
    value: float, uncertainty: float, unit: str, expected: str
) -> None:
    assert narrow(numbers.measured(value, uncertainty, unit)) == expected


@pytest.mark.parametrize(
    ("value", "uncertainty", "expected"),
    [
        (99.96, 0.0996, "99.96 ± 0.10"),  # rounding carries into a new digit and keeps two digits
        (-1.5, 0.25, "−1.50 ± 0.25"),
        (-0.001, 0.5, "0.00 ± 0.50"),  # no negative zero
        (12345.6, 1234, "12 300 ± 1200"),
        (0.0001234, 0.0000021, "(1.234 ± 0.021) × 10⁻⁴"),
        (5, 0, "5 ± 0"),
    ],
)
def test_measured(value: float, uncertainty: float, expected: str) -> None:
    assert narrow(numbers.measured(value, uncertainty)) == expected


def test_per_cent_belongs_to_both_numbers() -> None:
    assert narrow(numbers.measured(2.31, 0.12, "%")) == "(2.31 ± 0.12) %"


def test_interval_and_its_open_ends() -> None:
    assert narrow(numbers.interval(0.49, 0.41, 0.58, "mm")) == "0.490 [0.410, 0.580] mm"
    assert narrow(numbers.interval(2.14, 0.9, 3.1, "%")) == "2.1 [0.9, 3.1] %"
    assert narrow(numbers.interval(1.0, 0.5, math.inf)) == "1.00 [0.50, ∞]"
    assert numbers.interval(math.nan, 0, 1) == numbers.NOT_IDENTIFIABLE
    assert "interval not identifiable" in numbers.interval(2.0, math.nan, 3.0)


def test_ranges_are_rounded_by_their_width() -> None:
    assert narrow(numbers.span(-0.00404, 40.0, "%")) == "0–40 %"
    assert narrow(numbers.span(20.6, 24.3, "°C")) == "20.6–24.3 °C"
    assert narrow(numbers.span(-5, 5, "mm")) == "−5 to 5 mm"
    assert numbers.span(math.nan, 1) == "not recorded"


def test_probabilities_counts_and_shares() -> None:
    assert numbers.probability(0.0004) == "p < 0.001"
    assert numbers.probability(0.0123) == "p = 0.012"
    assert numbers.probability(0.5) == "p = 0.50"
    assert numbers.count(0, "sensor") == "no sensors"
    assert numbers.count(1, "sensor") == "1\u00a0sensor"
    assert numbers.count(39600, "reading").replace(numbers.NARROW_SPACE, " ") == "39 600\u00a0readings"
    assert numbers.count(2, "axis", "axes") == "2\u00a0axes"
    assert narrow(numbers.percent(0.583)) == "58 %"


FUNCTIONS = [
    lambda v: numbers.measured(v, 1.0),
    lambda v: numbers.measured(1.0, v),
    lambda v: numbers.interval(v, 0.0, 1.0),
    lambda v: numbers.significant(v),
    lambda v: numbers.fixed(v, 2),
    lambda v: numbers.whole(v),
    lambda v: numbers.probability(v),
    lambda v: numbers.percent(v),
    lambda v: numbers.limits(v, 1.0),
]


@pytest.mark.parametrize("function", FUNCTIONS)
def test_what_is_not_a_number_becomes_words(function: object) -> None:
    assert function(math.nan) == numbers.NOT_IDENTIFIABLE  # type: ignore[operator]


@given(st.floats(allow_nan=False, allow_infinity=False), st.floats(min_value=1e-300, max_value=1e300))
def test_no_number_shows_a_hyphen_an_e_or_nan(value: float, uncertainty: float) -> None:
    for text in (numbers.measured(value, uncertainty, "pF"), numbers.significant(value)):
        assert not re.search(r"-|e\+|nan|inf|\d,\d", text)


@given(st.floats(min_value=-1e5, max_value=1e5), st.floats(min_value=1e-3, max_value=1e3))
def test_value_and_uncertainty_end_at_the_same_place_and_hold_the_value(value: float, u: float) -> None:
    text = numbers.measured(value, u).replace(numbers.NARROW_SPACE, "").replace(numbers.MINUS, "-")
    first, second = text.split(" ± ")
    assert len(first.partition(".")[2]) == len(second.partition(".")[2])
    assert abs(float(first) - value) <= 0.06 * u
    assert float(second) == pytest.approx(u, rel=0.051)


def test_columns_of_numbers_align_by_their_points() -> None:
    padded = numbers.aligned(["1.25", "12", "−3.5", "not identifiable from this design"])
    assert padded[:3] == ["1.25", "12\u2008\u2007\u2007", "−3.5\u2007"]
    assert padded[3] == "not identifiable from this design"


def test_nearly_none_and_nearly_all_are_not_none_and_all() -> None:
    assert numbers.percent(1e-7) == "< 0.01\u202f%"
    assert numbers.percent(0.99996) == "> 99.9\u202f%"
    assert numbers.percent(0.9971) == "99.7\u202f%"
    assert numbers.percent(1.0) == "100\u202f%"
