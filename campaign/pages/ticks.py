"""Where an axis is marked: round steps, or powers of ten and their parts."""

from __future__ import annotations

import math

from campaign.pages.numbers import MINUS, NARROW_SPACE


def linear_ticks(low: float, high: float, about: int = 5) -> list[tuple[float, str]]:
    """Return places and texts of ticks at steps of 1, 2 or 5 times a power of ten; two at least."""
    low, high = min(low, high), max(low, high)
    if not high > low:
        return [(low, tick_text(low, 2))]
    step = _round_step((high - low) / max(about, 1))
    first, last = _multiples(low, high, step)
    if first == last:  # one tick is no scale
        step = _round_step((high - low) / 5)
        first, last = _multiples(low, high, step)
    decimals = max(0, -math.floor(math.log10(step)))
    return [(k * step, tick_text(round(k * step, decimals + 1), decimals)) for k in range(first, last + 1)]


def _multiples(low: float, high: float, step: float) -> tuple[int, int]:
    return math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)


def logarithmic_ticks(low: float, high: float) -> list[tuple[float, str]]:
    """Return ticks for exponents *low* to *high*: powers of ten, with 2 and 5 between few of them."""
    low, high = min(low, high), max(low, high)
    parts = (1, 2, 5) if high - low < 2.5 else (1,)
    exponents = range(math.floor(low), math.ceil(high) + 1)
    places = [(math.log10(part) + k, part * 10.0**k) for k in exponents for part in parts]
    return [(place, _short(value)) for place, value in places if low - 1e-9 <= place <= high + 1e-9]


def tick_text(value: float, decimals: int) -> str:
    """Return a tick's text with a minus sign and thousands set off from 10 000."""
    if abs(value) >= 1e6 or (value != 0 and abs(value) < 1e-5):
        return _short(value)
    text = f"{abs(value):.{decimals}f}"
    if abs(value) >= 10_000:
        text = f"{abs(value):,.{decimals}f}".replace(",", NARROW_SPACE)
    return (MINUS if value < 0 and float(text.replace(NARROW_SPACE, "")) != 0 else "") + text


def _round_step(step: float) -> float:
    power = 10.0 ** math.floor(math.log10(step))
    return next(factor * power for factor in (1.0, 2.0, 5.0, 10.0) if factor * power >= step * 0.999)


def _short(value: float) -> str:
    return f"{value:g}".replace("e-0", "e-").replace("e+0", "e").replace("e+", "e").replace("-", MINUS)
