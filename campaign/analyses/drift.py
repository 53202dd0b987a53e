"""What time does: holds at a kept length, noise at rest, the zero across sessions, blank channels."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd
from scipy import stats

from campaign.analyses.blank_channels import blank_table, parasitic_table
from campaign.analyses.hold_figures import (
    FORM_COLUMNS,
    OF_FULL_SCALE,
    OF_SIGNAL,
    FittedHold,
    HoldCurve,
    HoldScale,
    fit_holds,
    form_rows,
    hold_curve,
    hold_row,
    holds_frame,
)
from campaign.analyses.hold_scales import scale_of_hold, sensor_scales
from campaign.analyses.hold_spread import spread_of_slopes
from campaign.analyses.noise_at_rest import allan_table, floors_table
from campaign.analyses.sensor_figures import FIGURE_COLUMNS
from campaign.analyses.zero_over_time import ZeroOverTime, zero_over_time
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import ELONGATION, STRAIN, ReferenceQuantity
from campaign.trials.hold import Hold, HoldFeatures
from campaign.trials.readings import SENSOR_KEYS
from campaign.workers.workshop import Workshop

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration
    from campaign.recordings.sensor_share import TrialKey

BAND_PERCENT = 1.0
"""Half-width, in per cent, of the band of the settling time where the description states no limit."""


@dataclass(frozen=True)
class Drift:
    """What time does to the sensors of a campaign.

    Attributes
    ----------
    reference
        What lengths are given in; names with ``strain`` hold its values.
    holds
        One row a hold, columns :data:`campaign.analyses.hold_figures.HOLD_COLUMNS`.
    forms
        One row a hold and form.
    curves
        Every hold as drawn, in the order of ``holds``.
    allan, floors
        Allan deviation at rest, blank channels included; what it says about averaging.
    components, means
        The nested model of slopes a decade of holds at a stretched length.
    zero
        The zero across sessions; ``None`` without staircases.
    blanks, parasitic
        Channels without a sensor; what their capacitance hides.
    band_percent
        Half-width of the band of the settling times.
    figures
        ``drift_1h`` of every sensor as a figure of merit that limits are judged by.
    notices
        What was found when the holds of all trials were put together.
    """

    reference: ReferenceQuantity
    holds: pd.DataFrame
    forms: pd.DataFrame
    curves: tuple[HoldCurve, ...]
    allan: pd.DataFrame
    floors: pd.DataFrame
    components: pd.DataFrame
    means: pd.DataFrame
    zero: ZeroOverTime | None
    blanks: pd.DataFrame
    parasitic: pd.DataFrame
    band_percent: float
    figures: pd.DataFrame
    notices: tuple[Notice, ...]


def analyse_drift(
    features: Mapping[TrialKey, HoldFeatures],
    calibration: Calibration | None,
    description: Description,
    workshop: Workshop | None = None,
) -> Drift | None:
    """Analyse every hold and blank channel, and the zero across sessions.

    Parameters
    ----------
    features
        Reduced trials of kinds ``hold`` and ``blank``.
    calibration
        Lines of the sensors, ``None`` where no staircase was read: then figures are per cent of the first
        settled signal.
    description
        Limits.
    workshop
        Who fits, and what earlier runs fitted; this process alone where ``None``.

    Returns
    -------
    Drift or None
        ``None`` where there is no hold, no blank channel and no second session.
    """
    zero = zero_over_time(calibration)
    kept = [own for own in features.values() if own.holds]
    if not kept and (zero is None or zero.model.empty):
        return None
    sensors = [own for own in kept if own.identity.kind != "blank"]
    blank = [own for own in kept if own.identity.kind == "blank"]
    reference = _reference(sensors, calibration)
    scales = sensor_scales(calibration)
    band = _band(description)
    each = [(own, number, hold) for own in sensors for number, hold in enumerate(own.holds, 1)]
    named = [(own.identity, own.unit, number, hold) for own, number, hold in each]
    fits = fit_holds(named, workshop or Workshop())
    fitted = [
        (fit, scale_of_hold(own, hold, scales), _kept_x(hold, reference))
        for fit, (own, _, hold) in zip(fits, each, strict=True)
    ]
    holds = holds_frame([hold_row(one, scale, x, band) for one, scale, x in fitted])
    blanks = blank_table(blank)
    components, means = spread_of_slopes(holds)
    return Drift(
        reference=reference,
        holds=holds,
        forms=pd.DataFrame(
            [row for one, _, _ in fitted for row in form_rows(one)], columns=list(FORM_COLUMNS)
        ),
        curves=_curves(fitted, holds),
        allan=allan_table([*sensors, *blank], scales),
        floors=floors_table([*sensors, *blank], scales),
        components=components,
        means=means,
        zero=zero,
        blanks=blanks,
        parasitic=parasitic_table(blanks, calibration),
        band_percent=band,
        figures=_figures(holds),
        notices=tuple(_notices(holds)),
    )


def _reference(features: list[HoldFeatures], calibration: Calibration | None) -> ReferenceQuantity:
    if calibration is not None:
        return calibration.reference
    holds = [hold for own in features for hold in own.holds]
    lengths = [hold for hold in holds if math.isfinite(hold.kept_elongation_mm + hold.kept_length_mm)]
    return STRAIN if all(math.isfinite(hold.kept_strain) for hold in lengths) else ELONGATION


def _kept_x(hold: Hold, reference: ReferenceQuantity) -> float:
    kept = {"strain": hold.kept_strain, "elongation": hold.kept_elongation_mm}
    return kept.get(reference.name, hold.kept_length_mm)


def _band(description: Description) -> float:
    value, unit = description.limits.get("drift_1h", (BAND_PERCENT, "%FSO"))
    return value if unit == "%FSO" and value > 0 else BAND_PERCENT


def _curves(fitted: list[tuple[FittedHold, HoldScale, float]], holds: pd.DataFrame) -> tuple[HoldCurve, ...]:
    """Curves in the order of the table."""
    ends = {
        (row["trial"], row["sensor"], row["repetition"], row["hold"]): row["change_end_percent_fso"]
        for row in holds.to_dict("records")
    }
    made = {}
    for one, scale, x in fitted:
        key = (one.identity.file, one.identity.sensor, one.identity.repetition, one.number)
        made[key] = hold_curve(one, scale, x, float(ends[key]))
    return tuple(made[key] for key in ends)


# --- limits and notices


def _figures(holds: pd.DataFrame) -> pd.DataFrame:
    """``drift_1h`` of every sensor: the largest change in the first hour over its holds.

    Holds whose change cannot be told from that of temperature carry no uncertainty, so that they decide
    nothing; they count only where a sensor has no other.
    """
    rows = holds[holds["percent_of"] == OF_FULL_SCALE].dropna(subset=["change_1h_percent_fso"])
    if rows.empty:
        return pd.DataFrame(columns=list(FIGURE_COLUMNS))
    undecided = rows["verdict"] == "undecided"
    rows = rows.assign(_undecided=undecided, _size=rows["change_1h_percent_fso"].abs())
    rows = rows.sort_values(
        [*SENSOR_KEYS, "_undecided", "_size"], ascending=[True] * 4 + [False], kind="stable"
    )
    worst = rows.drop_duplicates(SENSOR_KEYS).reset_index(drop=True)
    error = worst["change_1h_standard_error"].where(~worst["_undecided"]).astype(float)
    freedom = worst["change_1h_df"].astype(float)
    reach = error * stats.t.ppf(0.975, freedom)
    return worst[SENSOR_KEYS].assign(
        figure="drift_1h",
        unit="%FSO",
        estimate=worst["_size"],
        low=(worst["_size"] - reach).clip(lower=0.0).where(reach.notna()),
        high=worst["_size"] + reach,
        standard_uncertainty=error,
        degrees_of_freedom=freedom,
        kind="estimate",
    )[list(FIGURE_COLUMNS)]


def _notices(holds: pd.DataFrame) -> Iterable[Notice]:
    without = holds[holds["percent_of"] == OF_SIGNAL]
    for trial, rows in without.groupby("trial", sort=True):
        yield Notice(
            "hold-without-line",
            "noted",
            str(trial),
            None,
            None,
            "no staircase line gives the full-scale output of this sensor",
            "changes are given in per cent of the first settled signal",
            "add a staircase of the sensor",
            len(rows),
        )
