"""Lists of numbers as short texts: whole steps of the last decimal place, from each number to the next.

Numbers in figures are rounded to a place of their axis, so that a list of them is a list of whole numbers of
that place, and most lie near their neighbours. A text of one list begins with a letter for the number of
decimals; then comes every step from the number before, five bits a letter, the lowest first, a letter that is
followed by another of the same step standing 32 places later in :data:`LETTERS`. The lowest bit of a step is
its sign. A point stands for no number. ``assets/unfold.js`` reads them, as :func:`unpacked` does.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
import numpy.typing as npt

LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-_"
NOTHING = "."
"""Stands for a value that is not a number."""

_MOST_DECIMALS = 12
_LARGEST = 2.0**48
_SHORT = 2**15
"""Steps below this many are looked up: all that three letters hold."""
_SAMPLED = 6


def packed(values: Sequence[float | None]) -> str | None:
    """Return *values* as a text, or ``None`` where they are not whole numbers of one decimal place.

    What is packed comes back exactly, bit by bit, but for the sign of a zero.
    """
    try:
        numbers = np.array(values, dtype=float)
    except (TypeError, ValueError):
        return None
    if numbers.ndim != 1 or not numbers.size:
        return None
    missing = np.isnan(numbers)
    seen = numbers[~missing] if missing.any() else numbers
    found = _whole_numbers(seen)
    if found is None:
        return None
    decimals, whole = found
    steps = whole.copy()
    steps[1:] -= whole[:-1]
    signed = 2 * np.abs(steps) + (steps < 0)
    texts = _letters_of(signed.tolist())
    if missing.any():
        own = iter(texts)
        texts = [NOTHING if gone else next(own) for gone in missing.tolist()]
    return LETTERS[decimals] + "".join(texts)


def unpacked(text: str) -> list[float | None]:
    """Return the numbers of a text that :func:`packed` made."""
    unit, whole, step, scale = 10.0 ** LETTERS.index(text[0]), 0, 0, 1
    values: list[float | None] = []
    for letter in text[1:]:
        if letter == NOTHING:
            values.append(None)
            continue
        place = LETTERS.index(letter)
        step += (place % 32) * scale
        scale *= 32
        if place < 32:
            whole += -(step >> 1) if step & 1 else step >> 1
            values.append(whole / unit)
            step, scale = 0, 1
    return values


def _whole_numbers(values: npt.NDArray[np.float64]) -> tuple[int, npt.NDArray[np.int64]] | None:
    """Return the number of decimals of *values*, and how many units of the last place each of them is."""
    largest = float(np.abs(values).max()) if values.size else 0.0
    first = max((_decimals(v) for v in values[:_SAMPLED].tolist()), default=0)
    for decimals in range(first, _MOST_DECIMALS + 1):
        unit = 10.0**decimals
        if not largest * unit < _LARGEST:
            return None
        whole = np.rint(values * unit)
        if np.array_equal(whole / unit, values):
            return decimals, whole.astype(np.int64)
    return None


def _decimals(value: float) -> int:
    """Return how many decimals a number is written with; one with an exponent is left to the search."""
    text = repr(value)
    return 0 if "e" in text or text.endswith(".0") else len(text.partition(".")[2])


def _letters_of(signed: list[int]) -> list[str]:
    """Return the letters of every step in order; short ones are looked up."""
    short = _short_steps()
    most = len(short)
    return [short[step] if step < most else _written(step) for step in signed]


@cache
def _short_steps() -> list[str]:
    return [_written(step) for step in range(_SHORT)]


def _written(step: int) -> str:
    letters = []
    while step >= 32:
        letters.append(LETTERS[32 + step % 32])
        step //= 32
    return "".join((*letters, LETTERS[step]))
