"""What page 0 says of time: holds and the zero across sessions, as facts."""

from __future__ import annotations

import math
from dataclasses import dataclass

import pandas as pd

from campaign.analyses.drift import Drift
from campaign.analyses.findings import Finding, SensorFigure, limit_value, sum_up, verdict_of_limit
from campaign.analyses.hold_figures import OF_FULL_SCALE
from campaign.analyses.limits import Limits


@dataclass(frozen=True)
class HoldsFinding:
    """Holds of one generation.

    ``figure`` sums up each sensor's largest change, sign left out: in the first hour where ``hourly``, else
    by the end of the hold. ``by_line`` says whether it is in %FSO, or in per cent of the first settled
    signal. ``relaxation`` … ``undecided`` count the holds by what they may be called; ``moved`` of them had a
    temperature that moved. ``per_decade`` with its limits is the mean slope of stretched holds, NaN where
    unknown.
    """

    figure: SensorFigure
    hourly: bool
    by_line: bool
    holds: int
    relaxation: int
    creep: int
    drift: int
    undecided: int
    moved: int
    per_decade: float
    per_decade_low: float
    per_decade_high: float


@dataclass(frozen=True)
class ZeroFinding:
    """The zero of one generation across sessions, %FSO: slope a day over ``days``, SD of a new mounting.

    Where the sensors of a module share mountings the larger of their common and their own part is given. NaN
    where the design does not give one.
    """

    generation: str
    days: float
    slope: float
    slope_low: float
    slope_high: float
    mounting: float
    mounting_low: float
    mounting_high: float


_VERDICTS = ("relaxation", "creep", "drift", "undecided")


def drift_findings(drift: Drift | None, limits: Limits, put_back: Drift | None = None) -> tuple[Finding, ...]:
    """Return what page 0 says of holds and of the zero; nothing where neither was measured.

    *put_back* holds the holds with everything that was set aside put back, ``None`` where no holds were.
    """
    if drift is None:
        return ()
    found: list[Finding] = []
    holds = _holds(drift, limit_value(limits, "drift_1h"), put_back)
    if holds:
        found.append(Finding("holds", holds, verdict_of_limit(limits, "drift_1h"), "drift_1h"))
    zeros = _zeros(drift)
    if zeros:
        found.append(Finding("zero_over_time", zeros))
    return tuple(found)


def _holds(drift: Drift, limit: float, put_back: Drift | None) -> tuple[HoldsFinding, ...]:
    facts = []
    for generation, rows in drift.holds.groupby("generation", sort=True):
        by_line = rows[rows["percent_of"] == OF_FULL_SCALE]
        counted = by_line if len(by_line) else rows
        hourly = bool(counted["change_1h_percent_fso"].notna().any())
        column = "change_1h_percent_fso" if hourly else "change_end_percent_fso"
        largest = _largest(counted, column)
        also = None if put_back is None else _largest(_as_counted(put_back.holds, bool(len(by_line))), column)
        judged = limit if hourly and len(by_line) else math.nan
        called = rows["verdict"].value_counts()
        relaxation, creep, drifting, undecided = (int(called.get(name, 0)) for name in _VERDICTS)
        slope = _mean_slope(drift.means, str(generation))
        facts += [
            HoldsFinding(
                figure,
                hourly,
                bool(len(by_line)),
                len(rows),
                relaxation,
                creep,
                drifting,
                undecided,
                int((rows["temperature"] == "not steady").sum()),
                *slope,
            )
            for figure in sum_up(largest, judged, also)
        ]
    return tuple(facts)


def _as_counted(holds: pd.DataFrame, by_line: bool) -> pd.DataFrame:
    return holds[holds["percent_of"] == OF_FULL_SCALE] if by_line else holds


def _largest(holds: pd.DataFrame, column: str) -> pd.DataFrame:
    """Each sensor's largest change, sign left out."""
    values = holds.assign(value=holds[column].abs())
    return values.groupby(["generation", "module", "sensor"]).agg(value=("value", "max")).reset_index()


def _mean_slope(means: pd.DataFrame, generation: str) -> tuple[float, float, float]:
    rows = means[means["generation"] == generation]
    if rows.empty:
        return math.nan, math.nan, math.nan
    row = rows.iloc[0]
    return float(row["percent_fso_per_decade"]), float(row["low"]), float(row["high"])


def _zeros(drift: Drift) -> tuple[ZeroFinding, ...]:
    if drift.zero is None:
        return ()
    facts = []
    for generation, rows in drift.zero.model.groupby("generation", sort=True):
        by_term = {str(row["term"]): row for row in rows.to_dict("records")}
        nothing = {"estimate": math.nan, "low": math.nan, "high": math.nan}
        slope = by_term.get("slope", nothing)
        parts = [by_term[name] for name in ("mounting", "session") if name in by_term]
        mounting = max(parts, key=lambda part: float(part["estimate"]), default=nothing)
        triples = [float(part[key]) for part in (slope, mounting) for key in ("estimate", "low", "high")]
        facts.append(ZeroFinding(str(generation), drift.zero.days[str(generation)], *triples))
    return tuple(facts)
