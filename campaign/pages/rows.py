"""The rows of one sensor or one module of a table, found by one pass over the table.

Pages of sensors and modules ask the same tables for the rows of each in turn; comparing whole columns anew
each time would grow with the square of the campaign.
"""

from __future__ import annotations

import weakref
from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import pandas as pd

_Places = dict[tuple[str, ...], npt.NDArray[np.int64]]
_known: dict[tuple[int, tuple[str, ...]], tuple[weakref.ref[pd.DataFrame], int, _Places]] = {}


def of_sensor(frame: pd.DataFrame, module: str, sensor: str) -> pd.DataFrame:
    """Return the rows of one sensor (columns ``module`` and ``sensor``) in their order."""
    return _rows(frame, ("module", "sensor"), (module, sensor))


def of_module(frame: pd.DataFrame, module: str) -> pd.DataFrame:
    """Return the rows of one module (column ``module``) in their order."""
    return _rows(frame, ("module",), (module,))


def _rows(frame: pd.DataFrame, keys: tuple[str, ...], wanted: tuple[str, ...]) -> pd.DataFrame:
    places = _places(frame, keys).get(wanted)
    return frame.iloc[:0] if places is None else frame.take(places)


def _places(frame: pd.DataFrame, keys: tuple[str, ...]) -> _Places:
    """Return where the rows of each key are; a table that has grown or gone is gone through anew."""
    name = (id(frame), keys)
    known = _known.get(name)
    if known is not None and known[0]() is frame and known[1] == len(frame):
        return known[2]
    found: dict[tuple[str, ...], list[int]] = {}
    for place, key in enumerate(zip(*(map(str, frame[k].tolist()) for k in keys), strict=True)):
        found.setdefault(key, []).append(place)
    places = {key: np.array(own, dtype=np.int64) for key, own in found.items()}
    _known[name] = (weakref.ref(frame, _forgetting(name)), len(frame), places)
    return places


def _forgetting(name: tuple[int, tuple[str, ...]]) -> Callable[[object], None]:
    def forget(_: object) -> None:
        _known.pop(name, None)

    return forget
