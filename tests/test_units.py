"""Units against pint as an independent oracle, and the spellings that must not be taken."""

from __future__ import annotations

import math
import unicodedata
from fractions import Fraction

import numpy as np
import pint
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.units import (
    FAMILIES,
    QUANTITY_FAMILIES,
    Scale,
    UnitError,
    canonical_unit,
    find_unit,
    looks_like_timestamp,
    nearest_spelling,
    parse_number,
    parse_quantity,
    parse_timestamp,
    split_header,
    unit_of_cell,
)

OWN_SPELLINGS = {
    # ours → pint's, where pint wants another spelling
    "kohm": "kiloohm",
    "kOhm": "kiloohm",
    "Mohm": "megaohm",
    "MOhm": "megaohm",
    "Gohm": "gigaohm",
    "GOhm": "gigaohm",
    "mohm": "milliohm",
    "mOhm": "milliohm",
    "Ohm": "ohm",
    "ohms": "ohm",
    "msec": "ms",
    "sec": "s",
    "in": "inch",
    "gf": "gram_force",
    "kgf": "kilogram_force",
    "lbf": "pound_force",
    "℃": "degC",
    "°C": "degC",
    "deg_C": "degC",
    "C": "degC",
    "K": "kelvin",
    "°F": "degF",
    "℉": "degF",
    "deg_F": "degF",
    "F": "degF",
    "celsius": "degC",
    "h": "hour",
}
PINTED = (
    "time",
    "length",
    "pressure",
    "force",
    "capacitance",
    "resistance",
    "inductance",
    "voltage",
    "frequency",
)


@pytest.fixture(scope="module")
def registry() -> pint.UnitRegistry:
    return pint.UnitRegistry(autoconvert_offset_to_baseunit=True)


@pytest.mark.parametrize(
    ("family", "spelling"),
    [(name, spelling) for name in PINTED for spelling in FAMILIES[name].scales],
)
def test_factors_are_those_of_pint(registry, family, spelling):
    theirs = OWN_SPELLINGS.get(spelling, spelling) if spelling != "F" else "farad"
    canonical = {"Ω": "ohm", "µH": "microhenry"}.get(FAMILIES[family].canonical, FAMILIES[family].canonical)
    factor = registry.Quantity(1.0, theirs).to(canonical).magnitude
    assert float(FAMILIES[family].scales[spelling].factor) == pytest.approx(factor, rel=1e-12)


@pytest.mark.parametrize("spelling", FAMILIES["temperature"].scales)
@pytest.mark.parametrize("value", [-40.0, 0.0, 36.6, 451.0])
def test_temperatures_are_those_of_pint(registry, spelling, value):
    theirs = registry.Quantity(value, OWN_SPELLINGS.get(spelling, spelling)).to("degC").magnitude
    assert FAMILIES["temperature"].scales[spelling].of(value) == pytest.approx(theirs, rel=1e-12, abs=1e-11)


@pytest.mark.parametrize(
    ("spelling", "family", "exact"),
    [
        # NIST SP 811 (2008), B.8: exact by definition, or the quotient of such
        ("in", "length", Fraction("25.4")),
        ("lbf", "force", Fraction("4.4482216152605")),
        ("kgf", "force", Fraction("9.80665")),
        ("psi", "pressure", Fraction("4.4482216152605") / Fraction("0.00064516") / 1000),
        ("mbar", "pressure", Fraction(1, 10)),
    ],
)
def test_defined_factors_are_exact(spelling, family, exact):
    assert FAMILIES[family].scales[spelling] == Scale(exact)


@given(st.floats(-1e6, 1e6), st.sampled_from([(f.name, s) for f in FAMILIES.values() for s in f.scales]))
def test_arrays_and_single_values_convert_alike(value, place):
    scale = FAMILIES[place[0]].scales[place[1]]
    [array] = scale.of_array(np.array([value]))
    exact = Fraction(value) * scale.factor + scale.offset
    largest = max(abs(Fraction(value) * scale.factor), abs(scale.offset), Fraction(1, 10**300))
    assert abs(Fraction(float(array)) - exact) <= largest * Fraction(1, 10**12)
    assert scale.of(value) == float(exact)


def test_canonical_values_are_not_touched():
    values = np.array([0.1, math.nan, 1e-300])
    assert FAMILIES["length"].scales["mm"].of_array(values) is values


@pytest.mark.parametrize(
    ("spelling", "quantity", "hint"),
    [
        ("pf", "signal", "pF?"),
        ("kpa", "pressure", "kPa?"),
        ("MM", "length", "mm?"),
        ("PF", "signal", "pF?"),
        ("S", "time", "s?"),
    ],
)
def test_case_is_not_forgiven_but_hinted_at(spelling, quantity, hint):
    with pytest.raises(UnitError, match=hint.replace("?", r"\?")):
        find_unit(spelling, QUANTITY_FAMILIES[quantity])


def test_the_ohm_sign_and_both_micro_signs_are_taken():
    assert find_unit("k\u2126", ("resistance",)).scale == find_unit("kohm", ("resistance",)).scale
    assert find_unit("\u00b5F", ("capacitance",)).scale == find_unit("\u03bcF", ("capacitance",)).scale


def test_the_wrong_family_is_named():
    with pytest.raises(UnitError, match="'kPa' is a unit of pressure, not of length"):
        find_unit("kPa", QUANTITY_FAMILIES["length"])
    with pytest.raises(UnitError, match="no accepted unit"):
        find_unit("furlong", QUANTITY_FAMILIES["length"])


def test_no_spelling_of_a_quantity_has_two_meanings():
    for quantity, families in QUANTITY_FAMILIES.items():
        for spelling in {s for name in families for s in FAMILIES[name].scales}:
            meant = [FAMILIES[name].name for name in families if spelling in FAMILIES[name].scales]
            if quantity == "signal":
                assert meant[0] == find_unit(spelling, families).family.name
            else:
                assert len(meant) == 1, (quantity, spelling, meant)


@pytest.mark.parametrize(
    ("header", "name", "unit"),
    [
        ("time_s", "time", "s"),
        ("length [mm]", "length", "mm"),
        ("capacitance (pF)", "capacitance", "pF"),
        ("p / kPa", "p", "kPa"),
        ("p/kPa", "p", "kPa"),
        ("stretch_mm", "stretch", "mm"),
        ("d, mm", "d", "mm"),
        ("C1  pF", "C1", "pF"),
        ("timestamp(ms)", "timestamp", "ms"),
        ("strain_mm/mm", "strain", "mm/mm"),
        ("strain_%", "strain", "%"),
        ("T / °C", "T", "°C"),
        ("temperature_deg_C", "temperature", "deg_C"),
        ("C_AB (pF)", "C_AB", "pF"),
        ("capacitance_pf", "capacitance", "pf"),
        ("capacitance ()", "capacitance", None),
        ("C_1", "C_1", None),
        ("note", "note", None),
        ("", "", None),
    ],
)
def test_headers_are_taken_apart(header, name, unit):
    parts = split_header(header)
    assert (parts.name, parts.unit) == (name, unit)


@given(st.text(max_size=40))
def test_any_header_can_be_taken_apart(header):
    parts = split_header(header)
    assert parts.unit is None or parts.unit in unicodedata.normalize("NFC", header)


@pytest.mark.parametrize(
    ("cell", "unit"), [("[mm]", "mm"), (" (pF) ", "pF"), ("s", "s"), ("", ""), ("[]", "[]")]
)
def test_units_rows_lose_their_brackets(cell, unit):
    assert unit_of_cell(cell) == unit


@pytest.mark.parametrize(
    ("text", "families", "value", "unit"),
    [
        ("0.05 mm", ("length",), 0.05, "mm"),
        ("0.5in", ("length",), 12.7, "mm"),
        ("8 h", ("time",), 28800.0, "s"),
        ("12 ms", ("time",), 0.012, "s"),
        ("20 kPa", ("pressure",), 20.0, "kPa"),
        ("2 %FSO", ("share of full scale",), 2.0, "%FSO"),
        ("10 K", ("temperature difference",), 10.0, "K"),
        ("0.1 1/s", ("rate",), 0.1, "1/s"),
        ("1.2 kohm", ("resistance",), 1200.0, "Ω"),
        ("100 kHz", ("frequency",), 1e5, "Hz"),
        ("0.02", ("strain",), 0.02, "mm/mm"),
        ("2 %", ("strain",), 0.02, "mm/mm"),
        ("+1e-3 pF", ("capacitance",), 0.001, "pF"),
    ],
)
def test_quantities_with_units_are_read(text, families, value, unit):
    quantity = parse_quantity(text, families)
    assert (quantity.value, quantity.unit) == (value, unit)


@pytest.mark.parametrize(
    "text", ["mm", "0.05", "0.05 kPa", "0,05 mm", "1_000 mm", "0x1 mm", "nan mm", "1 2 mm", ""]
)
def test_other_quantities_are_refused(text):
    with pytest.raises(UnitError):
        parse_quantity(text, ("length",))


@pytest.mark.parametrize("text", ["1_0", "1e", "inf", "nan", "0x10", "1,5", "", "５", "TRUE", "1 0"])
def test_only_plain_numbers_are_numbers(text):
    with pytest.raises(UnitError):
        parse_number(text)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_written_floats_are_numbers(value):
    assert parse_number(repr(value)) == value


def test_timestamps_are_read_in_one_order_only():
    assert parse_timestamp("1970-01-02T00:00:00Z") == 86400.0
    assert parse_timestamp("2026-03-04 10:00:00.12") - parse_timestamp(
        "2026/03/04 09:59:00"
    ) == pytest.approx(60.12)
    assert parse_timestamp("2026-03-04T10:00:00+02:00") == parse_timestamp("2026-03-04T08:00:00")
    assert parse_timestamp("2026-03-04T10:00:00-0130") == parse_timestamp("2026-03-04T11:30:00")
    assert not looks_like_timestamp("03/04/2024 10:00:00")
    for text in ("03/04/2024 10:00:00", "2026-02-30 10:00:00", "2026-03-04", "10:00"):
        with pytest.raises(UnitError):
            parse_timestamp(text)


def test_hints_and_canonical_units():
    assert nearest_spelling("PSI") == "psi"
    assert nearest_spelling("parsec") is None
    assert canonical_unit("bar", "pressure") == "kPa"
    assert canonical_unit("nF", "signal") == "pF"
