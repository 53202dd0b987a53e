"""Numbers as text: the only place of the site that rounds.

Uncertainty is given to two significant digits and the value to the same place (GUM 7.2.6: it usually suffices
to quote uncertainties to at most two significant digits). Minus is a minus sign, thousands and units are set
off by a narrow space that does not break, and what is not a number becomes words.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from decimal import ROUND_HALF_EVEN, Context, Decimal

NOT_IDENTIFIABLE = "not identifiable from this design"
"""What stands where the design supports no number."""

NARROW_SPACE = "\u202f"
MINUS = "\u2212"
FIGURE_SPACE = "\u2007"
PUNCTUATION_SPACE = "\u2008"
_EVERY_DIGIT = Context(prec=700)
_SUPERSCRIPTS = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")


def measured(value: float, uncertainty: float, unit: str = "", *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return ``12.34 ± 0.12 pF``: value and uncertainty, both to the second digit of the uncertainty.

    Parameters
    ----------
    value, uncertainty, unit
        The value, its standard or expanded uncertainty (the text around says which), and the unit of both.
    missing
        What is returned where the value or its uncertainty is not a finite number.
    """
    if not (math.isfinite(value) and math.isfinite(uncertainty)):
        return missing
    if uncertainty == 0:
        return _with_unit(f"{_trimmed(significant(value, 6))} ± 0", unit)
    place = _last_place(uncertainty, 2)
    power = _shared_power(max(abs(value), uncertainty), place)
    first, second = (_at_place(number, place, power) for number in (value, uncertainty))
    if power:
        return _with_unit(f"({first} ± {second}){_times_power(power)}", unit)
    return f"({first} ± {second}){NARROW_SPACE}%" if unit == "%" else _with_unit(f"{first} ± {second}", unit)


def interval(
    estimate: float, low: float, high: float, unit: str = "", *, missing: str = NOT_IDENTIFIABLE
) -> str:
    """Return ``0.49 [0.41, 0.58] mm``: estimate and limits, to two digits of the half-width.

    A limit that is infinite is shown as ``∞``; without an estimate *missing* is returned; where a limit is
    not a number the estimate is followed by 'interval not identifiable'.
    """
    if not math.isfinite(estimate):
        return missing
    if math.isnan(low) or math.isnan(high):
        return f"{significant(estimate, 2, unit)} (interval not identifiable)"
    place = _place_of_interval(estimate, low, high)
    power = _shared_power(max(abs(v) for v in (estimate, low, high) if math.isfinite(v)), place)
    centre, lower, upper = (_at_place(number, place, power) for number in (estimate, low, high))
    return _with_unit(f"{centre} [{lower}, {upper}]{_times_power(power)}", unit)


def limits(low: float, high: float, unit: str = "", *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return ``[0.41, 0.58] mm``: an interval with no estimate, to two digits of half its width."""
    if math.isnan(low) or math.isnan(high):
        return missing
    place = _place_of_interval(low if math.isfinite(low) else high, low, high)
    return _with_unit(f"[{_at_place(low, place, 0)}, {_at_place(high, place, 0)}]", unit)


def span(low: float, high: float, unit: str = "", *, digits: int = 3, missing: str = "not recorded") -> str:
    """Return ``0–40 %``: the range that something covers, to *digits* digits of its width."""
    if not (math.isfinite(low) and math.isfinite(high)):
        return missing
    place = _last_place(high - low, digits) if high != low else _last_place(high, digits)
    power = _shared_power(max(abs(low), abs(high)), place)
    ends = [_trimmed(_at_place(v, place, power)) for v in (low, high)]
    joint = " to " if ends[0].startswith(MINUS) or ends[1].startswith(MINUS) else "–"
    return _with_unit((ends[0] if ends[0] == ends[1] else joint.join(ends)) + _times_power(power), unit)


def covered(low: float, high: float, unit: str = "", *, missing: str = "not recorded") -> str:
    """Return ``0–40 %``: a range that was visited, each end to a hundredth of its width."""
    if not (math.isfinite(low) and math.isfinite(high)):
        return missing
    if high == low:
        return significant(low, 3, unit)
    first, last = (rounded_to(end, high - low) for end in (low, high))
    return span(first, last, unit, digits=6)


def rounded_to(value: float, scale: float) -> float:
    """Return *value* rounded to two places below *scale*'s leading digit: noise about zero becomes zero."""
    if not (math.isfinite(value) and scale > 0):
        return value
    return round(float(value), 2 - math.floor(math.log10(scale))) + 0.0


def significant(value: float, digits: int = 3, unit: str = "", *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return *value* to so many significant *digits*; for numbers whose uncertainty stands beside them."""
    if not math.isfinite(value):
        return missing
    place = _last_place(value, digits)
    power = _shared_power(abs(value), place)
    return _with_unit(_at_place(value, place, power) + _times_power(power), unit)


def fixed(value: float, decimals: int, unit: str = "", *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return *value* with so many *decimals*; for columns of like numbers."""
    return _with_unit(_at_place(value, -decimals, 0), unit) if math.isfinite(value) else missing


def whole(value: float, *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return a whole number with thousands set off: ``39 600``."""
    return _at_place(value, 0, 0) if math.isfinite(value) else missing


def count(number: int, singular: str, plural: str | None = None) -> str:
    """Return ``1 sensor``, ``12 sensors``, ``no sensors``; *plural* where an s does not make it."""
    many = plural if plural is not None else f"{singular}s"
    if number == 0:
        return f"no {many}"
    return f"{whole(number)}\u00a0{singular if number == 1 else many}"


def probability(p: float, *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return ``p = 0.012`` or ``p < 0.001``."""
    if not math.isfinite(p):
        return missing
    if p < 0.001:
        return "p < 0.001"
    return f"p = {p:.3f}" if p < 0.1 else f"p = {p:.2f}"


def percent(fraction: float, digits: int = 2, *, missing: str = NOT_IDENTIFIABLE) -> str:
    """Return a fraction of one as ``58 %``, to so many significant digits.

    Neither none nor all is said of what is only near it: ``< 0.01 %`` and ``> 99.9 %``.
    """
    if not math.isfinite(fraction):
        return missing
    value = fraction * 100.0
    if 0 < value < 0.005:
        return _with_unit("< 0.01", "%")
    if 99.95 <= value < 100:
        return _with_unit("> 99.9", "%")
    place = max(_last_place(value, digits), -digits) if abs(value) < 99.95 else 0
    if 99.5 <= value < 99.95:
        place = min(place, -1)
    return _with_unit(_at_place(value, place, 0), "%")


def aligned(texts: Sequence[str]) -> list[str]:
    """Return *texts* padded on the right by spaces as wide as a digit or a point, so that their points align.

    Only plain numbers take part; with any other text (``±``, brackets, words) in the column the number stays
    as it is and is aligned by its right edge.
    """
    plain = [text for text in texts if _is_plain(text)]
    longest = max((len(text.partition(".")[2]) for text in plain), default=0)
    return [_padded(text, longest) if _is_plain(text) else text for text in texts]


def decimals_of(uncertainty: float) -> int:
    """Return how many decimals show two digits of *uncertainty* (0 where that is not positive)."""
    return max(-_last_place(uncertainty, 2), 0) if math.isfinite(uncertainty) and uncertainty > 0 else 0


def _last_place(value: float, digits: int) -> int:
    """Return the power of ten of the last of *digits* significant digits, after rounding carried over."""
    if value == 0:
        return 0
    size = abs(float(value))
    if digits <= _CERTAIN_DIGITS and not _may_be_halfway(size):
        return int(f"{size:.{digits - 1}e}".partition("e")[2]) - digits + 1
    place = Decimal(repr(size)).adjusted() - digits + 1
    return _rounded(size, place).adjusted() - digits + 1


_CERTAIN_DIGITS = 9


def _may_be_halfway(value: float) -> bool:
    """Return whether the shortest decimal form of *value* may lie halfway between two rounded numbers.

    Where it does not, the number itself lies on the same side of halfway (a decimal between the two would be
    shorter, or nearer), and Python's own formatting of it gives the same digits.
    """
    text = repr(float(value))
    return text[-1] == "5" or "e" in text or text.endswith("5.0")


def _rounded(value: float, place: int) -> Decimal:
    """Return *value*, in its shortest decimal form, rounded to the power of ten *place*, halves to even."""
    return Decimal(repr(float(value))).quantize(Decimal(1).scaleb(place), ROUND_HALF_EVEN, _EVERY_DIGIT)


def _place_of_interval(estimate: float, low: float, high: float) -> int:
    widths = [abs(limit - estimate) for limit in (low, high) if math.isfinite(limit) and limit != estimate]
    return _last_place(sum(widths) / len(widths), 2) if widths else _last_place(estimate, 3)


def _shared_power(largest: float, place: int) -> int:
    """Return the power of ten to set apart: 0 for numbers that read well as they are."""
    if largest == 0 or (place <= 3 and 1e-3 <= largest < 1e6):
        return 0
    exponent = Decimal(repr(float(largest))).adjusted()
    return exponent if exponent >= 6 or exponent < -3 or place > 3 else 0


def _at_place(value: float, place: int, power: int) -> str:
    if math.isinf(value):
        return "∞" if value > 0 else f"{MINUS}∞"
    if not power and -_CERTAIN_DIGITS < place <= 0 and abs(value) < 1e4 and not _may_be_halfway(value):
        text = f"{value:.{-place}f}"
        return text if text[0] != "-" else f"{MINUS}{text[1:]}" if text.strip("-0.") else text[1:]
    number = _rounded(value, place).scaleb(-power, _EVERY_DIGIT)
    sign = MINUS if number < 0 else ""  # a zero that came from a small negative number has no sign
    return sign + _grouped(f"{abs(number):f}")


def _is_plain(text: str) -> bool:
    return bool(text) and all(c in f"0123456789.{MINUS}{NARROW_SPACE}" for c in text)


def _padded(text: str, decimals: int) -> str:
    own = len(text.partition(".")[2])
    point = PUNCTUATION_SPACE if decimals and not own else ""
    return text + point + FIGURE_SPACE * (decimals - own)


def _grouped(text: str) -> str:
    whole_part, point, decimals = text.partition(".")
    if len(whole_part) > 4:
        whole_part = f"{int(whole_part):,}".replace(",", NARROW_SPACE)
    return whole_part + point + decimals


def _times_power(power: int) -> str:
    return f"{NARROW_SPACE}×{NARROW_SPACE}10{str(power).translate(_SUPERSCRIPTS)}" if power else ""


def _trimmed(text: str) -> str:
    return text.rstrip("0").rstrip(".") if "." in text else text


def _with_unit(text: str, unit: str) -> str:
    return f"{text}{NARROW_SPACE}{unit}" if unit and unit != "1" else text
