"""Units: accepted spellings, exact factors, plausible ranges; the only place that converts.

Spellings are exact, upper and lower case included, because ``mPa`` and ``MPa`` are nine decades apart. Every
factor is a ratio of whole numbers, so that a converted value is within two roundings of the exact one.

Sources: The International System of Units (SI Brochure, 9th edition, 2019), table 8 and section 2.3.4;
NIST SP 811 (2008), appendix B.8, for inch, pound-force, gram-force and pounds per square inch,
all exact by definition.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from fractions import Fraction
from functools import lru_cache

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


class UnitError(ValueError):
    """A unit that is no accepted spelling, or of the wrong kind; the text says which, and the way out."""


@dataclass(frozen=True)
class Scale:
    """From a unit to its family's canonical unit: canonical value = ``factor`` · value + ``offset``."""

    factor: Fraction
    offset: Fraction = Fraction(0)

    def of(self, value: float) -> float:
        """Return one value in the canonical unit, correctly rounded."""
        return float(Fraction(value) * self.factor + self.offset)

    def of_array(self, values: FloatArray) -> FloatArray:
        """Return values in the canonical unit, within 1e-12 relative (to the largest term); NaN stays NaN."""
        if self.factor == 1 and self.offset == 0:
            return values
        scaled = values * float(self.factor.numerator) / float(self.factor.denominator)
        return scaled + float(self.offset) if self.offset else scaled


@dataclass(frozen=True)
class Family:
    """Units of one kind.

    Attributes
    ----------
    name
        Such as ``"length"`` or ``"capacitance"``.
    canonical
        The unit that values are kept in.
    scales
        Accepted spelling → scale to the canonical unit.
    plausible
        Smallest and largest value, in canonical units, that an instrument could mean; a value beyond it
        stands for "no value", as 9.91E+37 does.
    """

    name: str
    canonical: str
    scales: Mapping[str, Scale]
    plausible: tuple[float, float]


@dataclass(frozen=True)
class Unit:
    """One accepted spelling of a unit, with its family and scale."""

    spelling: str
    family: Family

    @property
    def scale(self) -> Scale:
        """Scale to the canonical unit of the family."""
        return self.family.scales[self.spelling]

    @property
    def is_canonical(self) -> bool:
        """Whether values in it need no conversion."""
        return self.scale == Scale(Fraction(1))


def _family(
    name: str, canonical: str, plausible: tuple[float, float], spellings: Mapping[str, str]
) -> Family:
    """Build a family from ``{"1/1000": "ms msec"}``: factor (and offset after a blank) → spellings."""
    scales = {
        spelling: Scale(*(Fraction(part) for part in factor.split()))
        for factor, words in spellings.items()
        for spelling in words.split()
    }
    return Family(name, canonical, scales, plausible)


_POUND_FORCE = Fraction("4.4482216152605")
_PSI_IN_KPA = _POUND_FORCE / Fraction("0.0254") ** 2 / 1000

FAMILIES: dict[str, Family] = {
    family.name: family
    for family in (
        _family(
            "time",
            "s",
            (-1e12, 1e12),
            {
                "1": "s sec second seconds",
                "1/1000": "ms msec millisecond milliseconds",
                "1/1000000": "us µs μs microsecond microseconds",
                "1/1000000000": "ns",
                "60": "min minute minutes",
                "3600": "h hr hour hours",
                "86400": "day days",
            },
        ),
        _family(
            "length",
            "mm",
            (-1e7, 1e7),
            {
                "1": "mm millimetre millimetres",
                "1/1000": "µm μm um micrometre micrometres",
                "1/1000000": "nm",
                "10": "cm",
                "1000": "m metre metres",
                "127/5": "in inch inches",
            },
        ),
        _family(
            "strain",
            "mm/mm",
            (-1e4, 1e4),
            {
                "1": "mm/mm m/m 1 -",
                "1/100": "% percent pct",
                "1/1000": "‰",
                "1/1000000": "µε με µm/m μm/m um/m ppm",
            },
        ),
        _family(
            "pressure",
            "kPa",
            (-1e8, 1e8),
            {
                "1": "kPa",
                "1/1000": "Pa",
                "1/10": "hPa mbar",
                "100": "bar",
                "1000": "MPa",
                str(_PSI_IN_KPA): "psi",
            },
        ),
        _family(
            "force",
            "N",
            (-1e9, 1e9),
            {
                "1": "N",
                "1/1000": "mN",
                "1000": "kN",
                "196133/20000000": "gf",
                "196133/20000": "kgf",
                str(_POUND_FORCE): "lbf",
            },
        ),
        _family(
            "temperature",
            "°C",
            (-273.15, 1e5),
            {
                "1": "°C ℃ degC deg_C C celsius",
                "1 -273.15": "K kelvin",
                "5/9 -160/9": "°F ℉ degF deg_F F",
            },
        ),
        _family(
            "temperature difference",
            "K",
            (-1e5, 1e5),
            {"1": "K °C ℃ degC", "5/9": "°F ℉ degF"},
        ),
        _family("humidity", "%", (-1e3, 1e4), {"1": "% %RH %rh RH% percent", "100": "1"}),
        _family(
            "capacitance",
            "pF",
            (-1e12, 1e12),
            {
                "1": "pF",
                "1/1000": "fF",
                "1/1000000": "aF",
                "1000": "nF",
                "1000000": "µF μF uF",
                "1000000000": "mF",
                "1000000000000": "F",
            },
        ),
        _family(
            "resistance",
            "Ω",
            (-1e15, 1e15),
            {
                "1": "Ω ohm Ohm ohms",
                "1/1000": "mΩ mohm mOhm",
                "1000": "kΩ kohm kOhm",
                "1000000": "MΩ Mohm MOhm",
                "1000000000": "GΩ Gohm GOhm",
            },
        ),
        _family(
            "inductance",
            "µH",
            (-1e12, 1e12),
            {"1": "µH μH uH", "1/1000": "nH", "1000": "mH", "1000000": "H"},
        ),
        _family(
            "voltage",
            "V",
            (-1e9, 1e9),
            {"1": "V", "1/1000": "mV", "1/1000000": "µV μV uV", "1000": "kV"},
        ),
        _family("counts", "counts", (-1e19, 1e19), {"1": "counts count cts LSB"}),
        _family("ratio", "1", (-1e15, 1e15), {"1": "1 -", "1/100": "% percent"}),
        _family("phase", "°", (-1e6, 1e6), {"1": "° deg"}),
        _family(
            "frequency",
            "Hz",
            (0.0, 1e15),
            {"1": "Hz", "1000": "kHz", "1000000": "MHz", "1000000000": "GHz"},
        ),
        _family(
            "rate", "1/s", (-1e12, 1e12), {"1": "1/s /s s^-1 s⁻¹ Hz", "1/100": "%/s", "1/60": "1/min /min"}
        ),
        _family("speed", "mm/s", (-1e9, 1e9), {"1": "mm/s", "1000": "m/s", "1/60": "mm/min"}),
        _family("share of full scale", "%FSO", (-1e6, 1e6), {"1": "%FSO %FS"}),
        _family("number", "", (-1e15, 1e15), {"1": "1 -"}),
    )
}
"""All families by name."""

SIGNAL_FAMILIES: tuple[str, ...] = (
    "capacitance",
    "resistance",
    "inductance",
    "voltage",
    "counts",
    "ratio",
    "pressure",
    "force",
    "length",
    "strain",
    "temperature",
    "frequency",
)
"""What a signal may be, in the order in which a spelling is looked up: any quantity may stand for it."""

QUANTITY_FAMILIES: dict[str, tuple[str, ...]] = {
    "time": ("time",),
    "length": ("length",),
    "elongation": ("length",),
    "strain": ("strain",),
    "signal": SIGNAL_FAMILIES,
    "pressure": ("pressure",),
    "force": ("force",),
    "temperature": ("temperature",),
    "humidity": ("humidity",),
    "level": ("number",),
    "direction": ("number",),
    "cycle": ("number",),
    "placement": ("number",),
    "node_x": ("length",),
    "node_y": ("length",),
    "node_z": ("length",),
    "resistance": ("resistance",),
    "phase": ("phase",),
    "loss": ("ratio", "resistance"),
}
"""Quantities of the campaign format → families whose units they take."""

UNITLESS_QUANTITIES = frozenset({"level", "direction", "cycle", "placement"})
"""Quantities that need no unit."""


@dataclass(frozen=True)
class HeaderParts:
    """A column's header taken apart.

    Attributes
    ----------
    name
        What is left without the unit, stripped of blanks.
    unit
        The unit's text as it stands, or ``None``. It need not be an accepted spelling when ``marked``.
    marked
        Whether brackets, a slash or a comma say that it is a unit.
    """

    name: str
    unit: str | None
    marked: bool


@dataclass(frozen=True)
class Quantity:
    """A number with a unit, such as "0.05 mm", in the canonical unit of its family.

    Attributes
    ----------
    value
        In ``unit``.
    unit
        Canonical unit.
    family
        Name of the family.
    text
        As written.
    """

    value: float
    unit: str
    family: str
    text: str


_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_TIMESTAMP = re.compile(
    r"([0-9]{4})[-/]([0-9]{2})[-/]([0-9]{2})[T ]([0-9]{2}):([0-9]{2})(?::([0-9]{2})(\.[0-9]+)?)?"
    r"(Z|[+-][0-9]{2}:?[0-9]{2})?"
)
_BRACKETED = re.compile(r"(.*?)\s*(?:\(([^()]*)\)|\[([^\[\]]*)\]|\{([^{}]*)\})\s*")
_BARE_UNITS_TOO_SHORT = frozenset({"1", "-"})
"""Spellings that are no unit without a mark: the 1 of ``C_1`` is a number, not a ratio."""


def _all_spellings() -> frozenset[str]:
    return frozenset(spelling for family in FAMILIES.values() for spelling in family.scales)


SPELLINGS: frozenset[str] = _all_spellings()
"""Every accepted spelling of every family."""


def nearest_spelling(spelling: str, families: tuple[str, ...] = tuple(FAMILIES)) -> str | None:
    """Return the accepted spelling that differs from *spelling* in upper and lower case only, or ``None``.

    Where several do (``mpa``: mPa is not accepted, MPa is), the first of the families is returned: it is a
    hint for a reader, never a conversion.
    """
    folded = spelling.strip().casefold()
    for name in families:
        for accepted in FAMILIES[name].scales:
            if accepted.casefold() == folded:
                return accepted
    return None


def find_unit(spelling: str, families: tuple[str, ...]) -> Unit:
    """Return the unit of that exact spelling among *families*.

    Raises
    ------
    UnitError
        When no family knows the spelling (with a hint where only case differs), or only others do.
    """
    text = unicodedata.normalize("NFC", spelling.strip())
    for name in families:
        if text in FAMILIES[name].scales:
            return Unit(text, FAMILIES[name])
    elsewhere = [family.name for family in FAMILIES.values() if text in family.scales]
    if elsewhere:
        raise UnitError(f"'{text}' is a unit of {elsewhere[0]}, not of {_listed(families)}")
    hint = nearest_spelling(text, families) or nearest_spelling(text)
    raise UnitError(f"'{text}' is no accepted unit" + (f", '{hint}?'" if hint else ""))


def _listed(names: tuple[str, ...]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1]


def canonical_unit(spelling: str, quantity: str) -> str:
    """Return the unit in which *quantity* is kept when given in *spelling*; raises :class:`UnitError`."""
    return find_unit(spelling, QUANTITY_FAMILIES[quantity]).family.canonical


@lru_cache(maxsize=4096)
def split_header(header: str) -> HeaderParts:
    """Take a header apart into name and unit: ``time_s``, ``length [mm]``, ``p / kPa``, ``d, mm``, ``C1 pF``.

    Without brackets, slash or comma a unit is only believed where it is an accepted spelling, or one but for
    upper and lower case (``capacitance_pf``: the caller refuses it with a hint).
    """
    text = unicodedata.normalize("NFC", header.strip())
    bracketed = _BRACKETED.fullmatch(text)
    if bracketed and bracketed[1]:
        inside = next(part for part in bracketed.groups()[1:] if part is not None).strip()
        return HeaderParts(bracketed[1], inside or None, bool(inside))
    if "," in text:
        name, _, unit = text.rpartition(",")
        return HeaderParts(name.strip(), unit.strip() or None, True)
    return (
        _split_at_exact(text)
        or _split_at_slash(text)
        or _split_at_folded(text)
        or HeaderParts(text, None, False)
    )


def _tails(text: str) -> list[tuple[str, str]]:
    """Every (name, tail) cut at a run of blanks or underscores, longest tail first."""
    cuts = [(text[: m.start()].rstrip(" /_"), text[m.end() :]) for m in re.finditer(r"[\s_]+", text)]
    return [(name, tail) for name, tail in cuts if name and tail and tail not in _BARE_UNITS_TOO_SHORT]


def _split_at_exact(text: str) -> HeaderParts | None:
    for name, tail in _tails(text):
        if tail in SPELLINGS:
            return HeaderParts(name, tail, False)
    return None


def _split_at_slash(text: str) -> HeaderParts | None:
    name, slash, unit = text.partition("/")
    return HeaderParts(name.strip(), unit.strip(), True) if slash and name.strip() and unit.strip() else None


def _split_at_folded(text: str) -> HeaderParts | None:
    for name, tail in _tails(text):
        if nearest_spelling(tail) is not None:
            return HeaderParts(name, tail, False)
    return None


def unit_of_cell(cell: str) -> str:
    """Return the unit that a cell of a units row states, without brackets: ``[mm]`` → ``mm``."""
    text = cell.strip()
    if len(text) > 2 and text[0] + text[-1] in {"[]", "()", "{}"}:
        return text[1:-1].strip()
    return text


def parse_number(text: str) -> float:
    """Return a plain decimal number (point as decimal sign); raises :class:`UnitError` for anything else."""
    stripped = text.strip()
    if not _NUMBER.fullmatch(stripped):
        raise UnitError(f"'{stripped}' is not a plain decimal number")
    return float(stripped)


def parse_quantity(text: str, families: tuple[str, ...]) -> Quantity:
    """Read a number with a unit, "0.05 mm", "8 h", "20 kPa", "2 %FSO", into the canonical unit.

    Parameters
    ----------
    text
        Number, blanks, unit. A number alone is taken where ``families`` holds ``"number"``, ``"ratio"`` or
        ``"strain"`` (their unit is 1).
    families
        Names of the families that are accepted here, such as ``("length",)``.

    Raises
    ------
    UnitError
        When the number is not plain, or the unit is missing, unknown or of another kind.
    """
    stripped = text.strip()
    number = _NUMBER.match(stripped)
    if number is None:
        raise UnitError(f"'{stripped}' does not start with a plain decimal number")
    spelling = stripped[number.end() :].strip()
    if not spelling and not any("1" in FAMILIES[name].scales for name in families):
        raise UnitError(
            f"'{stripped}' has no unit; {_listed(families)} needs one, such as {_example(families)}"
        )
    unit = find_unit(spelling or "1", families)
    exact = Fraction(number[0]) * unit.scale.factor + unit.scale.offset
    return Quantity(float(exact), unit.family.canonical, unit.family.name, stripped)


def _example(families: tuple[str, ...]) -> str:
    return f"'{FAMILIES[families[0]].canonical}'"


def looks_like_timestamp(text: str) -> bool:
    """Return whether the text is a date with a time of day in the order year, month, day (ISO 8601)."""
    return _TIMESTAMP.fullmatch(text.strip()) is not None


def parse_timestamp(text: str) -> float:
    """Return seconds since 1970 of an ISO 8601 date with time; without an offset it is taken as UTC.

    Only the order year, month, day is read: ``03/04/2024`` is two different days in two countries.

    Raises
    ------
    UnitError
        When the text is anything else, or no such moment exists.
    """
    match = _TIMESTAMP.fullmatch(text.strip())
    if match is None:
        raise UnitError(
            f"'{text.strip()}' is not a date and time in the order year-month-day hour:minute:second"
        )
    year, month, day, hour, minute, second = (int(part or 0) for part in match.groups()[:6])
    try:
        moment = datetime(year, month, day, hour, minute, second, tzinfo=UTC)
    except ValueError as error:
        raise UnitError(f"'{text.strip()}' is no moment of the calendar") from error
    whole = moment.timestamp() - _offset_seconds(match[8])
    return float(Fraction(whole) + Fraction(match[7] or 0))


def _offset_seconds(offset: str | None) -> float:
    if offset is None or offset == "Z":
        return 0.0
    hours, minutes = int(offset[1:3]), int(offset[-2:])
    return (hours * 3600 + minutes * 60) * (-1.0 if offset[0] == "-" else 1.0)
