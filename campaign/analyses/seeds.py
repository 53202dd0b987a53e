"""Seeds of random numbers, taken from the data alone so that a report repeats.

Numbers enter with ten significant digits: another machine adds up in another order and may end a unit in the
last place apart, which would otherwise draw other random numbers altogether.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterable

import pandas as pd


def seed_from(words: Iterable[pd.Series | str], numbers: Iterable[pd.Series]) -> int:
    """Return a seed below 2⁶⁴ that depends on the values alone.

    Parameters
    ----------
    words
        Texts, and columns whose values are taken as text.
    numbers
        Columns of numbers; NaN counts as a value.
    """
    digest = hashlib.sha256()
    for told in words:
        text = told if isinstance(told, str) else "\n".join(told.astype(str))
        digest.update(text.encode())
    for column in numbers:
        digest.update("\n".join(f"{value:.9e}" for value in column.to_numpy(float).tolist()).encode())
    return int.from_bytes(digest.digest()[:8], "little")
