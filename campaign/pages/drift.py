"""Page 6, Drift: what time does to the signal, and what averaging buys."""

from __future__ import annotations

from collections.abc import Hashable, Mapping
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.drift import Drift
from campaign.analyses.hold_figures import OF_FULL_SCALE, OF_SIGNAL, RAMP_TIMES_LEFT_OUT, HoldCurve
from campaign.analyses.results import CampaignResults
from campaign.methods.creep import EXTRAPOLATION_LIMIT, WITHIN_UNITS
from campaign.pages import numbers, slugs
from campaign.pages.drift_figures import (
    PLACE_WORDS,
    allan_figure,
    decades_figure,
    hold_figure,
    holds_figure,
    percent_unit,
    time_words,
    zero_figure,
)
from campaign.pages.figures import Figure
from campaign.pages.page import Page
from campaign.pages.rows import of_sensor, records_of
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity
from campaign.trials.hold import STEADY_K

MOST_PLOTS = 12
"""Holds that a sensor's page draws in full; the table holds all."""


def drift_page(results: CampaignResults) -> Page | None:
    """Return page 6, or ``None`` where neither holds nor several sessions were measured."""
    drift = results.drift
    if drift is None:
        return None
    return Page(
        slug="drift",
        number=6,
        title="Drift",
        template="drift.html",
        context={
            "drift": drift,
            "reference": drift.reference,
            "counts": verdict_counts(drift),
            "temperatures": drift.holds["temperature"].value_counts().to_dict(),
            "by_signal": bool((drift.holds["percent_of"] == OF_SIGNAL).any()),
            "only_by_signal": bool((drift.holds["percent_of"] == OF_SIGNAL).all()) and len(drift.holds) > 0,
            "percent": _unit_of(drift),
            "means": records_of(drift.means),
            "slopes": _model_rows(drift, "slope"),
            "spans": {} if drift.zero is None else drift.zero.days,
            "mountings": [*_model_rows(drift, "mounting"), *_model_rows(drift, "session")],
            "widening": widening_words(drift),
            "moved": _moved(drift),
            "time_words": time_words,
            "steady_k": STEADY_K,
            "ramp_times": RAMP_TIMES_LEFT_OUT,
            "within_units": WITHIN_UNITS,
            "extrapolation_limit": EXTRAPOLATION_LIMIT,
        },
        figures=tuple(f for f in _figures(drift) if f is not None),
        tables=tuple(t for t in _tables(drift) if len(t.frame)),
        description="Holds against time, the zero across sessions, and noise at rest against averaging.",
    )


def _figures(drift: Drift) -> list[Figure | None]:
    chosen = largest_hold(drift)
    return [
        holds_figure(drift),
        None if chosen is None else hold_figure(chosen, drift.reference, "hold"),
        decades_figure(drift),
        zero_figure(drift),
        allan_figure(drift),
    ]


def largest_hold(drift: Drift) -> HoldCurve | None:
    """Return the hold that changes most among those a form was fitted to."""
    known = [c for c in drift.curves if np.isfinite(c.change)]
    fitted = [c for c in known if c.forms] or known
    return max(fitted, key=lambda c: abs(c.change), default=None)


def verdict_counts(drift: Drift) -> dict[str, int]:
    """Return how many holds are called relaxation, creep, drift or undecided."""
    found = drift.holds["verdict"].value_counts()
    return {name: int(found.get(name, 0)) for name in ("relaxation", "creep", "drift", "undecided")}


def widening_words(drift: Drift) -> tuple[float, float] | None:
    """Return the range of factors by which autocorrelation widens the slopes of holds at rest."""
    known = drift.holds["widening"].dropna()
    return (float(known.min()), float(known.max())) if len(known) else None


def _unit_of(drift: Drift) -> str:
    named = set(drift.holds["percent_of"])
    return percent_unit(OF_FULL_SCALE if OF_FULL_SCALE in named or not named else OF_SIGNAL)


def _model_rows(drift: Drift, term: str) -> list[dict[Hashable, Any]]:
    if drift.zero is None:
        return []
    model = drift.zero.model
    return records_of(model[model["term"] == term])


def _moved(drift: Drift) -> list[dict[Hashable, Any]]:
    """Holds whose temperature moved, with their addresses."""
    rows = drift.holds[drift.holds["temperature"] == "not steady"]
    return [
        {**row, "href": slugs.trial_href(str(row["module"]), str(row["sensor"]), str(row["trial"]))}
        for row in records_of(rows.head(5))
    ]


# --- tables


def _tables(drift: Drift) -> list[Table]:
    return [
        _forms_table(drift),
        holds_table(drift.holds, drift.reference),
        settling_table(drift.holds, drift.reference),
        _components_table(drift),
        _zero_model_table(drift),
        _zero_table(drift),
        _floors_table(drift),
        _blanks_table(drift),
        _parasitic_table(drift),
    ]


def holds_table(holds: pd.DataFrame, reference: ReferenceQuantity, name: str = "holds") -> Table:
    """Return the changes of every hold, those that change most first."""
    unit = _unit_of_rows(holds)
    none = "not reached"
    return Table(
        name=name,
        caption="Every hold: change since the first settled signal, and what it may be called.",
        frame=_shown_holds(holds),
        columns=(
            *_who_columns(reference),
            Column("called", "Called", kind="text"),
            _changes("change_1min", "after 1 min", unit, none),
            _changes("change_10min", "10 min", unit, none),
            _changes("change_1h", "1 h", unit, none),
            Column("percent_fso_per_decade", "a decade", unit, interval=("low", "high"), missing="too short"),
        ),
        shown_rows=15,
        source="holds",
        note="Brackets: 95 % limits of this one hold. They know its noise, not what another hold would give.",
    )


def settling_table(holds: pd.DataFrame, reference: ReferenceQuantity, name: str = "settling") -> Table:
    """Return how every hold goes on: slope for the other time zero, creep, zero return, forms, settling."""
    unit = _unit_of_rows(holds)
    band = numbers.significant(float(holds["band_percent_fso"].max()), 2, unit) if len(holds) else ""
    return Table(
        name=name,
        caption="Every hold: slope with time zero at the ramp’s start, 20 to 30 min, zero return, forms.",
        frame=_shown_holds(holds),
        columns=(
            *_who_columns(reference),
            Column("_lasts", "Lasts", kind="text"),
            Column("per_decade_from_ramp_start", "a decade", unit, digits=3, missing="no ramp"),
            _changes("creep_20_30min", "20–30 min", unit, "not reached"),
            _changes("zero_return", "zero return", unit, "not recorded"),
            Column("forms_shown", "Forms", kind="text"),
            Column("_settles", f"Settles to ±{band}", kind="text"),
        ),
        shown_rows=15,
        source="holds",
        note="Here time counts from the beginning of the ramp; the table before counts from its end. Where "
        "the two slopes differ the ramp still shows.",
    )


def _unit_of_rows(holds: pd.DataFrame) -> str:
    return percent_unit(str(holds["percent_of"].iloc[0])) if len(holds) else "%FSO"


def _who_columns(reference: ReferenceQuantity) -> tuple[Column, ...]:
    return (
        Column("_sensor", "Sensor", kind="text", href="_href"),
        Column("_place", "Place", kind="text"),
        Column(
            "strain",
            reference.name.capitalize(),
            reference.shown_unit,
            digits=3,
            factor=reference.shown_factor,
            missing="not known",
        ),
    )


def _shown_holds(holds: pd.DataFrame) -> pd.DataFrame:
    """The rows with their words and links, largest change first; strains to a hundredth of a per cent."""
    order = holds["change_end_percent_fso"].abs().sort_values(ascending=False, kind="stable").index
    frame = holds.loc[order].reset_index(drop=True)
    return frame.assign(
        _sensor=frame["module"].astype(str) + " " + frame["sensor"].astype(str),
        _href=[
            slugs.trial_href(str(m), str(s), str(t))
            for m, s, t in zip(frame["module"], frame["sensor"], frame["trial"], strict=True)
        ],
        strain=frame["strain"].round(4) + 0.0,
        _place=[PLACE_WORDS[str(p)] for p in frame["place"]],
        _lasts=[time_words(float(v)) for v in frame["duration_s"]],
        _settles=[_settling(row) for row in records_of(frame)],
    )


def _changes(name: str, head: str, unit: str, missing: str) -> Column:
    return Column(
        f"{name}_percent_fso", head, unit, interval=(f"{name}_low", f"{name}_high"), missing=missing
    )


def _settling(row: Mapping[Hashable, Any]) -> str:
    """Settling time into the band; for forms that never settle the change in the next decade."""
    if not row["form"]:
        return "too short to tell"
    if np.isfinite(row["settling_time_s"]):
        after = float(row["settling_time_s"])
        return f"after {time_words(after)}" if after > 0 else "within it throughout"
    if np.isfinite(row["next_decade_percent_fso"]):
        unit = percent_unit(str(row["percent_of"]))
        return f"never; {_with_sign(float(row['next_decade_percent_fso']), unit)} in the next decade"
    return "beyond what the record supports"


def _with_sign(value: float, unit: str) -> str:
    return ("+" if value > 0 else "") + numbers.significant(value, 2, unit)


def _forms_table(drift: Drift) -> Table:
    return Table(
        name="hold_forms",
        caption="Forms within two units of the best of every hold, with their shape parameters.",
        frame=drift.forms[drift.forms["shown"].astype(bool)].reset_index(drop=True),
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("repetition", "Run", kind="integer"),
            Column("form", "Form", kind="text"),
            Column("aicc_above_best", "AICc above the best", digits=2),
            Column("shape", "Shape, times in s", kind="text"),
            Column("residual_sd", "Whitened residual SD", digits=2),
        ),
        shown_rows=12,
        source="hold_forms",
        note="Smaller is better; within two units forms are not told apart.",
    )


def _components_table(drift: Drift) -> Table:
    return Table(
        name="hold_components",
        caption="Where the spread of the slopes a decade comes from, as standard deviations.",
        frame=drift.components,
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("called", "Differs by", kind="text"),
            Column("sd_percent_fso", "SD", "%FSO a decade", interval=("low", "high")),
            Column("degrees_of_freedom", "Degrees of freedom", kind="integer"),
            Column("label", "Label", kind="text"),
        ),
        note="Profile intervals. One hold a sensor leaves sensor and run in one.",
    )


def _zero_table(drift: Drift) -> Table:
    empty = pd.DataFrame(columns=["module", "sensor"])
    unit = str(drift.zero.table["unit"].iloc[0]) if drift.zero is not None and len(drift.zero.table) else ""
    frame = drift.zero.table if drift.zero is not None else empty
    if len(frame):
        later = frame.duplicated(["generation", "module", "sensor"])
        frame = frame.assign(_departure=frame["departure_percent_fso"].where(later))
    return Table(
        name="zero_over_time",
        caption="The zero of every sensor, session by session.",
        frame=frame,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("session", "Mounting", kind="text"),
            Column("day", "Day", digits=2, missing="not recorded"),
            Column("runs", "Runs", kind="integer"),
            Column("zero_signal", "Zero", unit, digits=5),
            Column(
                "_departure",
                "less first",
                "%FSO",
                interval=("departure_low", "departure_high"),
                missing="the first",
            ),
        ),
        shown_rows=12,
        note="Limits come from the scatter of runs about their session, pooled over the generation.",
    )


def _zero_model_table(drift: Drift) -> Table:
    return Table(
        name="zero_model",
        caption="What moves the zero: slope in time and standard deviations, by generation.",
        frame=drift.zero.model if drift.zero is not None else pd.DataFrame(columns=["generation"]),
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("called", "By", kind="text"),
            Column("estimate", "Estimate", interval=("low", "high")),
            Column("unit", "Unit", kind="text"),
            Column("degrees_of_freedom", "Degrees of freedom", digits=3),
            Column("label", "Label", kind="text"),
        ),
        note="Each sensor keeps its own mean; the slope is common to a generation.",
    )


def _floors_table(drift: Drift) -> Table:
    frame = drift.floors.assign(
        _best=[
            time_words(float(t)) if r else f"over {time_words(float(t))}"
            for t, r in zip(drift.floors["best_averaging_time_s"], drift.floors["reached"], strict=True)
        ]
    )
    unit = percent_unit(str(frame["percent_of"].iloc[0])) if len(frame) else "%FSO"
    return Table(
        name="noise_at_rest",
        caption="Noise at rest: white level, flicker floor and the best averaging time.",
        frame=frame,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("kind", "Kind", kind="text"),
            Column("white", "White", f"{unit}·√s", interval=("white_low", "white_high"), missing="not white"),
            Column(
                "flicker",
                "Flicker floor",
                unit,
                interval=("flicker_low", "flicker_high"),
                missing="not reached",
            ),
            Column("_best", "Best averaging time", kind="text"),
            Column("least_deviation", "Deviation there", unit, digits=2),
        ),
        shown_rows=40,
        note="A mean over τ seconds of white noise scatters by white/√τ.",
    )


def _blanks_table(drift: Drift) -> Table:
    unit = str(drift.blanks["unit"].iloc[0]) if len(drift.blanks) else ""
    return Table(
        name="blanks",
        caption="Channels without a sensor: what stands beside the sensors, and how the readout drifts.",
        frame=drift.blanks,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Channel", kind="text"),
            Column("mean", "Mean", unit, interval=("low", "high")),
            Column("per_hour", "an hour", unit, interval=("per_hour_low", "per_hour_high")),
            Column("temperature", "Temperature", kind="text"),
        ),
        note="The mean’s interval knows the noise of the record, not the readout’s offset.",
    )


def _parasitic_table(drift: Drift) -> Table:
    unit = str(drift.parasitic["unit"].iloc[0]) if len(drift.parasitic) else ""
    return Table(
        name="parasitic",
        caption="Stretch exponent and gauge factor with the blank channels’ capacitance taken off.",
        frame=drift.parasitic,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("parasitic", "Beside it", unit, digits=3),
            Column("stretch_exponent", "Exponent as seen", digits=3),
            Column("corrected_stretch_exponent", "corrected", interval=("corrected_low", "corrected_high")),
            Column("gauge_factor", "Gauge factor as seen", digits=3),
            Column("corrected_gauge_factor", "corrected", interval=("gauge_low", "gauge_high")),
        ),
        note="Divided by the share of the signal that is the sensor’s own.",
    )


# --- on sensors' pages


def sensor_holds(
    results: CampaignResults, module: str, sensor: str
) -> tuple[list[Figure], list[Table], dict[str, list[str]]]:
    """Return the figures of a sensor's holds, their tables, and the names of the figures by trial."""
    drift = results.drift
    if drift is None:
        return [], [], {}
    rows = of_sensor(drift.holds, module, sensor)
    if rows.empty:
        return [], [], {}
    own = [c for c in drift.curves if (c.module, c.sensor) == (module, sensor)][:MOST_PLOTS]
    figures = [
        hold_figure(c, drift.reference, f"hold-{i}", 280, most=100, with_samples=False, explained=i == 1)
        for i, c in enumerate(own, 1)
    ]
    by_trial: dict[str, list[str]] = {}
    for curve, figure in zip(own, figures, strict=True):
        by_trial.setdefault(curve.trial, []).append(figure.name)
    tables = [
        holds_table(rows, drift.reference, "own_holds"),
        settling_table(rows, drift.reference, "own_settling"),
    ]
    return figures, [_leading_within_the_page(table) for table in tables], by_trial


def _leading_within_the_page(table: Table) -> Table:
    """Return the table of a sensor's own page, whose links need not name the page."""
    anchors = table.frame["_href"].str.replace("^[^#]*", "", regex=True)
    return replace(table, frame=table.frame.assign(_href=anchors))
