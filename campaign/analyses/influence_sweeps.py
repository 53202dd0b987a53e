"""Sweeps of one influence as tables: their points, and one line a sweep."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.grouped_rows import groups_by, rows_of_all
from campaign.methods.influence_model import SweepLines, sweep_lines
from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN, ReferenceQuantity
from campaign.trials.readings import SENSOR_KEYS
from campaign.trials.sweeps import SweepFeatures

FloatArray = npt.NDArray[np.float64]

IDENTITY = ("generation", "module", "sensor", "position", "session", "repetition", "trial", "started")

SWEEP_COLUMNS = (
    *IDENTITY,
    *("unit", "influence_unit", "sweep", "points", "x", "influence_low", "influence_high"),
    *("level", "slope", "slope_error", "slope_freedom", "loop", "residual_sd"),
    *("time_correlation", "drift_per_s", "drift_p", "temperature_range_c", "run"),
)
"""Columns of a table of sweeps: one row a sweep. ``level`` and ``slope`` are of the line of signal against
influence less its zero; ``x`` is the kept reference value, NaN where not known; ``run`` numbers the
recordings of a sensor."""

COLUMN_OF = {"strain": "strain", "elongation": "elongation_mm", "length": "length_mm"}


def choose_reference(features: Iterable[SweepFeatures]) -> ReferenceQuantity:
    """Return what kept lengths are given in where no calibration says: strain if any is known."""
    tables = [found.points for found in features if len(found.points)]
    for reference in (STRAIN, ELONGATION, LENGTH):
        column = COLUMN_OF[reference.name]
        if any(table[column].notna().any() for table in tables):
            return reference
    return STRAIN


def gather_points(
    features: Iterable[SweepFeatures], reference: ReferenceQuantity, zero: float = 0.0
) -> pd.DataFrame:
    """Put the points of many trials together.

    Parameters
    ----------
    features
        Of one influence and unit.
    reference
        What x is.
    zero
        Value of the influence that counts as none of it (a temperature); taken off.

    Returns
    -------
    pandas.DataFrame
        The columns of :data:`IDENTITY`, those of the trials' points, ``x``, ``unit`` (of the signal),
        ``influence_unit``, the sweep's whole range and ``number``, which numbers the sweeps from 0; sorted by
        sensor, then trial.
    """
    held = [found for found in features if len(found.points)]
    if not held:
        return pd.DataFrame(columns=[*IDENTITY, "x", "number"])
    table = _with_identity(held)
    keys = [*SENSOR_KEYS, "session", "repetition", "trial", "sweep"]
    table = table.sort_values(keys, kind="stable", ignore_index=True)
    table["x"] = table[COLUMN_OF[reference.name]].astype(float)
    for column in ("influence", "influence_low", "influence_high"):
        table[column] = table[column] - zero
    table["number"] = table.groupby(keys, sort=False).ngroup()
    return table


def _with_identity(held: Sequence[SweepFeatures]) -> pd.DataFrame:
    """The points of all trials with whose they are and the range of their sweeps."""
    who = [found.identity for found in held]
    named: dict[str, Sequence[Any]] = {
        "generation": [own.generation for own in who],
        "module": [own.module for own in who],
        "sensor": [own.sensor for own in who],
        "position": [own.position for own in who],
        "session": [own.session for own in who],
        "repetition": [own.repetition for own in who],
        "trial": [own.file for own in who],
        "started": [own.started for own in who],
        "unit": [found.signal_unit for found in held],
        "influence_unit": [found.unit for found in held],
    }
    ends = [_ends_of_sweeps(found) for found in held]
    table = rows_of_all([found.points for found in held], named)
    table["influence_low"], table["influence_high"] = np.hstack(ends)
    return table


def _ends_of_sweeps(found: SweepFeatures) -> FloatArray:
    """Least and largest influence of the sweep that each point is of, shape (2, points)."""
    sweeps, place = np.unique(found.points["sweep"].to_numpy(), return_inverse=True)
    curves = [found.curves.get(int(sweep), (_NO_CURVE,))[0] for sweep in sweeps]
    return np.array([[curve.min() for curve in curves], [curve.max() for curve in curves]])[:, place]


_NO_CURVE = np.array([np.nan])


def sweep_table(points: pd.DataFrame) -> pd.DataFrame:
    """Return one row a sweep, columns of :data:`SWEEP_COLUMNS`, in the order of ``number``."""
    if points.empty:
        return pd.DataFrame(columns=list(SWEEP_COLUMNS))
    counts = np.bincount(points["number"].to_numpy(np.int64))
    lines = sweep_lines(
        points["influence"].to_numpy(float),
        points["signal"].to_numpy(float),
        counts.astype(np.int64),
        points["branch"].to_numpy(np.int64),
        points["time_s"].to_numpy(float),
    )
    grouped = points.groupby("number", sort=True)
    ends = ["influence_low", "influence_high"]
    table = grouped[[*IDENTITY, "unit", "influence_unit", "sweep", *ends]].first()
    table = table.assign(
        points=counts,
        x=grouped["x"].mean(),
        temperature_range_c=grouped["temperature_c"].max() - grouped["temperature_c"].min(),
    )
    return _with_lines(table.reset_index(drop=True), lines)[list(SWEEP_COLUMNS)]


def _with_lines(table: pd.DataFrame, lines: SweepLines) -> pd.DataFrame:
    run = table.groupby(SENSOR_KEYS, sort=False)["trial"].transform(lambda t: pd.factorize(t)[0])
    return table.assign(
        level=lines.level,
        slope=lines.slope,
        slope_error=lines.slope_error,
        slope_freedom=lines.slope_freedom,
        loop=lines.loop,
        residual_sd=lines.residual_sd,
        time_correlation=lines.time_correlation,
        drift_per_s=lines.drift,
        drift_p=lines.drift_p,
        run=run.astype(np.int64) + 1000 * (table["repetition"].astype(np.int64)),
    )


def time_labels(sweeps: pd.DataFrame, influence: str) -> dict[str, str]:
    """Return what must be read with the slopes because influence, order and time are not apart.

    Keys are ``one_way``, ``drift``, ``order`` and ``temperature``; absent where there is nothing to say.
    """
    labels = {}
    with_time = sweeps["time_correlation"].dropna().abs()
    tied = int((with_time > 0.9).sum())
    if tied:
        labels["one_way"] = (
            f"in {tied} of {len(sweeps)} sweeps {influence} and time run together: drift is part of the slope"
        )
    tested = sweeps["drift_p"].dropna()
    drifting = int((tested < 0.05 / max(len(tested), 1)).sum())
    if drifting:
        labels["drift"] = (
            f"{drifting} of {len(tested)} sweeps that could tell show a drift beside {influence} "
            "(Bonferroni over the sweeps)"
        )
    if _one_order(sweeps):
        labels["order"] = (
            "every run went through its lengths in the same order: a change with strain includes any change "
            "over the run"
        )
    moved = float(sweeps["temperature_range_c"].max()) if sweeps["temperature_range_c"].notna().any() else 0.0
    if influence != "temperature" and moved > 1.0:
        labels["temperature"] = f"temperature moved by up to {moved:.1f} K within a sweep"
    return labels


def _one_order(sweeps: pd.DataFrame) -> bool:
    """Whether all runs with several lengths went through them in one and the same direction."""
    signs: set[float] = set()
    x = sweeps["x"].to_numpy(float)
    for _, places in groups_by(sweeps, [*SENSOR_KEYS, "run"], sort=False):
        moves = np.diff(x[places])
        if len(moves) == 0 or not np.isfinite(moves).all():
            continue
        signs |= set(np.sign(moves).tolist())
    return len(signs) == 1 and 0.0 not in signs


def value_in_use(use: Mapping[str, float], name: str, sweeps: pd.DataFrame) -> tuple[float, bool]:
    """Return the influence in use and whether it is rated; else the largest that was measured."""
    rated = use.get(name, math.nan)
    if math.isfinite(rated):
        return rated, True
    return (float(sweeps["influence_high"].abs().max()), False) if len(sweeps) else (math.nan, False)
