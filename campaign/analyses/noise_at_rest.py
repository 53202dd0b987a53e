"""Allan deviation of every hold at rest, and what it says about averaging."""

from __future__ import annotations

import math
from collections.abc import Iterable

import pandas as pd

from campaign.analyses.hold_scales import SensorScales, scale_of_hold
from campaign.trials.hold import Hold, HoldFeatures
from campaign.trials.readings import SENSOR_KEYS

ALLAN_COLUMNS = (
    *("generation", "module", "sensor", "trial", "averaging_time_s", "deviation_strain", "low", "high"),
    *("session", "repetition", "hold", "kind", "deviation_signal", "unit", "deviation_percent_fso"),
    *("degrees_of_freedom", "noise_exponent", "percent_of"),
)
"""Columns of the table of Allan deviations; ``low`` and ``high`` belong to ``deviation_strain`` where a line
gives one, else to ``deviation_signal``."""

FLOOR_COLUMNS = (
    *(
        "generation",
        "module",
        "sensor",
        "trial",
        "session",
        "repetition",
        "hold",
        "kind",
        "unit",
        "percent_of",
    ),
    *("white", "white_low", "white_high", "flicker", "flicker_low", "flicker_high"),
    *("best_averaging_time_s", "least_deviation", "reached"),
)
"""Columns of the noise floors: ``white`` in %·√s, ``flicker`` and ``least_deviation`` in %."""


def _at_rest(features: Iterable[HoldFeatures]) -> list[tuple[HoldFeatures, int, Hold]]:
    return [
        (own, number, hold)
        for own in features
        for number, hold in enumerate(own.holds, 1)
        if hold.allan is not None and hold.floors is not None
    ]


def _who(own: HoldFeatures, number: int) -> dict[str, object]:
    identity = own.identity
    return {
        "generation": identity.generation,
        "module": identity.module,
        "sensor": identity.sensor,
        "trial": identity.file,
        "session": identity.session,
        "repetition": identity.repetition,
        "hold": number,
        "kind": identity.kind,
        "unit": own.unit,
    }


def allan_table(features: list[HoldFeatures], scales: SensorScales) -> pd.DataFrame:
    """Return the deviations of all holds at rest, columns :data:`ALLAN_COLUMNS`."""
    parts = []
    for own, number, hold in _at_rest(features):
        scale = scale_of_hold(own, hold, scales)
        allan = hold.allan
        if allan is None:
            continue
        to_x = abs(scale.per_strain) if math.isfinite(scale.per_strain) else math.nan
        shown = to_x if math.isfinite(to_x) else 1.0
        columns = {
            "averaging_time_s": allan.averaging_times_s,
            "deviation_strain": allan.deviations * to_x,
            "low": allan.low * shown,
            "high": allan.high * shown,
            "deviation_signal": allan.deviations,
            "deviation_percent_fso": allan.deviations * abs(scale.per_cent),
            "degrees_of_freedom": allan.degrees_of_freedom,
            "noise_exponent": allan.noise_exponents,
            "percent_of": scale.percent_of,
        }
        parts.append(pd.DataFrame({**_who(own, number), **columns}))
    if not parts:
        return pd.DataFrame(columns=list(ALLAN_COLUMNS))
    joined = pd.concat(parts, ignore_index=True)[list(ALLAN_COLUMNS)]
    keys = [*SENSOR_KEYS, "trial", "repetition", "hold", "averaging_time_s"]
    return joined.sort_values(keys, kind="stable", ignore_index=True)


def floors_table(features: list[HoldFeatures], scales: SensorScales) -> pd.DataFrame:
    """Return the floors of all holds at rest, columns :data:`FLOOR_COLUMNS`."""
    rows = []
    for own, number, hold in _at_rest(features):
        scale = scale_of_hold(own, hold, scales)
        floors = hold.floors
        if floors is None:
            continue
        factor = abs(scale.per_cent)
        levels = ("white", "white_low", "white_high", "flicker", "flicker_low", "flicker_high")
        rows.append(
            {
                **_who(own, number),
                "percent_of": scale.percent_of,
                **{name: getattr(floors, name) * factor for name in levels},
                "best_averaging_time_s": floors.best_averaging_time_s,
                "least_deviation": floors.least_deviation * factor,
                "reached": floors.reached,
            }
        )
    frame = pd.DataFrame(rows, columns=list(FLOOR_COLUMNS))
    return frame.sort_values([*SENSOR_KEYS, "trial", "repetition", "hold"], kind="stable", ignore_index=True)
