"""Which limits of the campaign are met: every figure judged with its own uncertainty, never bare.

A limit is judged for every sensor and for a new sensor of each generation. The probability of conformity
decides (JCGM 106:2012): from 95 % on a limit is met in this campaign, from 5 % down it is not met, between
the two nothing is decided. Where the description names no decision rule, simple acceptance is stated beside
it.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from scipy import special

from campaign.analyses.sensor_figures import FIGURE_COLUMNS, sensor_figures
from campaign.methods.conformity import (
    conformity_of_estimate,
    conformity_of_spread,
    predict_new_member,
    verdict_of,
)
from campaign.recordings.description import Description

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

LIMIT_COLUMNS = (
    "limit",
    "value",
    "unit",
    "subject",
    "estimate",
    "expanded_uncertainty",
    "verdict",
    "probability",
    "generation",
    "module",
    "sensor",
    "low",
    "high",
    "degrees_of_freedom",
    "accepted",
    "reason",
)
"""Columns of :attr:`Limits.table`; the first eight are the table's fixed part."""

JUDGED = (
    *("linearity", "hysteresis", "repeatability", "strain_error", "drift_1h", "pressure_error"),
    "node_error",
)
"""Limits that an analysis can answer, in the order in which pages show them."""

UNKNOWN = "uncertainty unknown"
TOO_FEW = "too few sensors"
ONE_MODULE = "one module"
CONDITIONS = "conditions of use not measured"
"""Reasons for which nothing is decided although the bare estimate may lie far from the limit."""

NEW_SUBJECT = {"node_error": "a node of a new module"}
"""What is predicted of a generation by a limit, where it is no new sensor."""

_SENSOR = ["generation", "module", "sensor"]
_CONDITIONS = ("time_since_zero", "temperature_range", "pressure", "rate")


@dataclass(frozen=True)
class Limits:
    """Verdicts on all limits of the description.

    Attributes
    ----------
    table
        One row a limit and subject, columns of :data:`LIMIT_COLUMNS`. ``value``, ``estimate``,
        ``expanded_uncertainty`` (half the 95 % interval), ``low`` and ``high`` are in ``unit``;
        ``probability`` is that of conformity, NaN where no uncertainty is known; ``accepted`` says whether
        the bare estimate would pass (simple acceptance, JCGM 106:2012, 8.2); ``reason`` names why nothing
        was decided, or is empty.
    figures
        The figures of merit of every sensor from its staircases with their intervals, judged or not
        (:func:`campaign.analyses.sensor_figures.sensor_figures`).
    further_figures
        Those of the other kinds of trial. One that bears the name of a figure of staircases is judged in its
        stead, in the generations that have it.
    not_judged
        Limits of the description that nothing measured so far can answer.
    conditions_not_measured
        Sources that the budget of any sensor misses: with one of them an error in use is 'at least' what was
        found, and its limit can fail but not be met.
    decision_rule
        The rule that ``accepted`` follows.
    """

    table: pd.DataFrame
    figures: pd.DataFrame
    not_judged: tuple[str, ...]
    conditions_not_measured: tuple[str, ...]
    decision_rule: str = "simple acceptance"
    further_figures: pd.DataFrame = field(default_factory=lambda: _no_figures())

    def of_new_sensors(self) -> pd.DataFrame:
        """Return the rows that judge a new sensor of a generation."""
        return self.table[self.table["sensor"] == ""]

    def of_sensors(self) -> pd.DataFrame:
        """Return the rows that judge one measured sensor."""
        return self.table[self.table["sensor"] != ""]


def judge_limits(
    description: Description,
    calibration: Calibration | None,
    further: Sequence[pd.DataFrame] = (),
    missing: Mapping[tuple[str, str, str], tuple[str, ...]] | None = None,
) -> Limits:
    """Judge every limit of *description* that an analysis can answer.

    Parameters
    ----------
    description
        Limits, range and conditions of use.
    calibration
        Lines, run lines, level differences and records; ``None`` where no staircase was read.
    further
        Figures of merit of the other kinds of trial, columns of
        :data:`campaign.analyses.sensor_figures.FIGURE_COLUMNS` each.
    missing
        (generation, module, sensor) → the sources that its budget misses; ``None`` where there is no budget:
        then every condition that ``[use]`` states is missing.

    Returns
    -------
    Limits
        An empty table where there are no limits or no figures.
    """
    conditions = _conditions(description, missing)
    figures = _no_figures() if calibration is None else sensor_figures(calibration, description)
    others = _joined(further)
    judgeable = _in_their_stead(figures, others)
    judged = [name for name in JUDGED if name in description.limits and name in set(judgeable["figure"])]
    rows: list[dict[str, object]] = []
    for name in judged:
        value, unit = description.limits[name]
        rows += _judge_sensors(name, value, unit, judgeable[judgeable["figure"] == name])
        rows += _judge_new_sensors(name, value, unit, judgeable[judgeable["figure"] == name])
    table = pd.DataFrame(rows, columns=list(LIMIT_COLUMNS))
    if conditions:
        table = _withhold_met(table, missing)
    absent = tuple(name for name in description.limits if name not in judged)
    return Limits(table, figures, absent, conditions, further_figures=others)


def _no_figures() -> pd.DataFrame:
    return pd.DataFrame(columns=list(FIGURE_COLUMNS))


def _joined(frames: Sequence[pd.DataFrame]) -> pd.DataFrame:
    known = [frame for frame in frames if len(frame)]
    return pd.concat(known, ignore_index=True)[list(FIGURE_COLUMNS)] if known else _no_figures()


def _in_their_stead(figures: pd.DataFrame, others: pd.DataFrame) -> pd.DataFrame:
    """Figures of staircases and the others; where a generation has both, the others alone."""
    if figures.empty or others.empty:
        return figures if others.empty else others
    keys = ["figure", "generation"]
    taken = pd.MultiIndex.from_frame(others[keys])
    kept = figures[~pd.MultiIndex.from_frame(figures[keys]).isin(taken)]
    return pd.concat([kept, others], ignore_index=True) if len(kept) else others


def _judge_sensors(name: str, value: float, unit: str, figures: pd.DataFrame) -> Iterator[dict[str, object]]:
    for figure in figures.to_dict("records"):
        judged = _judge_one(value, figure)
        who = {key: figure[key] for key in _SENSOR}
        yield {
            "limit": name,
            "value": value,
            "unit": unit,
            "subject": f"{figure['module']} {figure['sensor']}",
            **who,
            **judged,
        }


def _judge_one(value: float, figure: dict[Hashable, Any]) -> dict[str, object]:
    estimate, freedom = float(figure["estimate"]), float(figure["degrees_of_freedom"])
    if figure["kind"] == "spread":
        probability = conformity_of_spread(estimate, freedom, value)
    else:
        probability = conformity_of_estimate(estimate, float(figure["standard_uncertainty"]), freedom, value)
    return _verdict(value, estimate, figure["low"], figure["high"], freedom, probability, UNKNOWN)


def _verdict(
    value: float, estimate: float, low: float, high: float, freedom: float, probability: float, unknown: str
) -> dict[str, object]:
    return {
        "estimate": estimate,
        "low": low,
        "high": high,
        "expanded_uncertainty": (high - low) / 2,
        "degrees_of_freedom": freedom,
        "probability": probability,
        "verdict": verdict_of(probability),
        "accepted": bool(estimate <= value),
        "reason": unknown if math.isnan(probability) else "",
    }


def _judge_new_sensors(
    name: str, value: float, unit: str, figures: pd.DataFrame
) -> Iterator[dict[str, object]]:
    for generation, rows in figures.dropna(subset=["estimate"]).groupby("generation", sort=True):
        yield {
            "limit": name,
            "value": value,
            "unit": unit,
            "subject": f"{NEW_SUBJECT.get(name, 'a new sensor')} of {generation}",
            "generation": generation,
            "module": "",
            "sensor": "",
            **_judge_new(value, rows),
        }


def _judge_new(value: float, rows: pd.DataFrame) -> dict[str, object]:
    """Predict on the logarithm, the figures being positive and skewed; one module covers no new module."""
    values = rows["estimate"].to_numpy(float)
    modules = pd.factorize(rows["module"])[0]
    prediction = predict_new_member(np.log(values), modules) if np.all(values > 0) else None
    if prediction is None:
        estimate = float(np.mean(values))
        return _verdict(value, estimate, math.nan, math.nan, math.nan, math.nan, TOO_FEW)
    centre, spread, freedom = (
        prediction.estimate,
        prediction.standard_deviation,
        prediction.degrees_of_freedom,
    )
    estimate = math.exp(centre)
    if prediction.groups == 1 or spread == 0:
        return _verdict(value, estimate, math.nan, math.nan, freedom, math.nan, ONE_MODULE)
    reach = float(special.stdtrit(freedom, 0.975)) * spread
    probability = conformity_of_estimate(centre, spread, freedom, math.log(value))
    low, high = math.exp(centre - reach), math.exp(centre + reach)
    return _verdict(value, estimate, low, high, freedom, probability, "")


def _conditions(
    description: Description, missing: Mapping[tuple[str, str, str], tuple[str, ...]] | None
) -> tuple[str, ...]:
    if missing is None:
        return tuple(key for key in _CONDITIONS if key in description.use)
    return tuple(dict.fromkeys(source for sources in missing.values() for source in sources))


def _withhold_met(
    table: pd.DataFrame, missing: Mapping[tuple[str, str, str], tuple[str, ...]] | None
) -> pd.DataFrame:
    """An error in use holds influences not measured: it can be too large already, never small enough."""
    table = table.copy()
    open_ended = (table["limit"] == "strain_error") & (table["verdict"] == "met")
    if missing is not None:
        lacking = {key for key, sources in missing.items() if sources}
        lacking |= {(generation, "", "") for generation, _, _ in lacking}
        keys = zip(table["generation"], table["module"], table["sensor"], strict=True)
        open_ended &= np.array([key in lacking for key in keys], dtype=bool)
    table.loc[open_ended, "verdict"] = "not decided"
    table.loc[open_ended, "reason"] = CONDITIONS
    return table
