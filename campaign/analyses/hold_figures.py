"""One hold as figures: changes, slope a decade, forms, zero return, and whether it may be called drift."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.shared_work import do_all
from campaign.methods.block_noise import BlockNoise, Stretches
from campaign.methods.creep import (
    NEVER_SETTLES,
    CreepFits,
    FittedForm,
    bare_fits,
    fit_creep,
    fits_from_bare,
    slope_per_decade,
)
from campaign.recordings.recording import TrialIdentity
from campaign.trials.hold import Hold, SignalAt
from campaign.workers.workshop import Workshop

FloatArray = npt.NDArray[np.float64]

RAMP_TIMES_LEFT_OUT = 10.0
"""Data earlier than this many ramp times after the end of the ramp take no part in slopes and forms."""

OF_FULL_SCALE, OF_SIGNAL = "full-scale output", "first settled signal"
"""What per cent figures are per cent of."""

HOLD_COLUMNS = (
    "generation",
    "module",
    "sensor",
    "trial",
    "strain",
    "duration_s",
    "form",
    "change_1min_percent_fso",
    "change_10min_percent_fso",
    "change_1h_percent_fso",
    "percent_fso_per_decade",
    "low",
    "high",
    "creep_20_30min_percent_fso",
    "zero_return_percent_fso",
    "verdict",
    "batch",
    "position",
    "session",
    "repetition",
    "started",
    "hold",
    "place",
    "kept",
    "called",
    "percent_of",
    "first_signal",
    "unit",
    "ramp_s",
    "change_1min_low",
    "change_1min_high",
    "change_10min_low",
    "change_10min_high",
    "change_1h_low",
    "change_1h_high",
    "change_1h_standard_error",
    "change_1h_df",
    "change_1h_strain",
    "change_end_percent_fso",
    "change_end_low",
    "change_end_high",
    "per_decade_from_ramp_start",
    "per_decade_from_s",
    "creep_20_30min_low",
    "creep_20_30min_high",
    "zero_return_low",
    "zero_return_high",
    "forms_shown",
    "settling_time_s",
    "band_percent_fso",
    "next_decade_percent_fso",
    "percent_fso_per_hour",
    "per_hour_low",
    "per_hour_high",
    "lag_one",
    "widening",
    "temperature",
    "temperature_mean_c",
    "temperature_range_k",
)
"""Columns of the table of holds; the first sixteen are the promised ones."""

FORM_COLUMNS = (
    "generation",
    "module",
    "sensor",
    "trial",
    "session",
    "repetition",
    "hold",
    "form",
    "aicc_above_best",
    "shown",
    "parameters",
    "shape",
    "residual_sd",
    "unit",
    "evaluations",
    "converged",
    "on_bound",
)
"""Columns of the table of forms."""


@dataclass(frozen=True)
class HoldScale:
    """What a hold's changes are divided by.

    Attributes
    ----------
    per_cent
        Per cent of ``percent_of`` a unit of the signal.
    percent_of
        :data:`OF_FULL_SCALE` or :data:`OF_SIGNAL`.
    per_strain
        Units of the reference a unit of the signal; NaN without a line.
    relative_uncertainty
        Of the scale: standard uncertainty of the line's slope over the slope; 0 without a line.
    """

    per_cent: float
    percent_of: str
    per_strain: float
    relative_uncertainty: float


@dataclass(frozen=True)
class HoldCurve:
    """One hold as drawn, in per cent of what its scale says, zero at its first settled signal.

    ``times_s`` (s after the end of the ramp), ``low``, ``high`` and ``mean`` have shape (buckets,); ``forms``
    are the forms within two units of the best, as (name, values at ``form_times_s``). ``samples_s`` and
    ``samples`` are the samples that are kept of the ``recorded_samples``, as recorded, in s after the end of
    the ramp and signal units; ``zero`` (a signal) and ``per_cent`` (of a signal unit) take them to per cent.
    """

    generation: str
    module: str
    sensor: str
    session: str
    repetition: int
    trial: str
    hold: int
    place: str
    called: str
    percent_of: str
    strain: float
    change: float
    times_s: FloatArray
    low: FloatArray
    high: FloatArray
    mean: FloatArray
    form_times_s: FloatArray
    forms: tuple[tuple[str, FloatArray], ...]
    samples_s: FloatArray
    samples: FloatArray
    recorded_samples: int
    zero: float
    per_cent: float


@dataclass(frozen=True)
class FittedHold:
    """A hold with what was fitted to it.

    Attributes
    ----------
    identity, unit, number
        Whose it is, the unit of its signal, its number in its recording from 1.
    hold
        As reduced.
    late, late_means
        The means late enough for slopes and forms.
    fits
        Forms; ``None`` where there are too few late means.
    noise
        Noise of the means; of all of them where there are too few late ones; ``None`` where there are too few
        at all.
    """

    identity: TrialIdentity
    unit: str
    number: int
    hold: Hold
    late: Stretches
    late_means: FloatArray
    fits: CreepFits | None
    noise: BlockNoise | None


WORTH_HOLDS = 60
"""Holds from which on sharing their fits out is faster."""


def fit_holds(holds: Sequence[tuple[TrialIdentity, str, int, Hold]], workshop: Workshop) -> list[FittedHold]:
    """Fit all forms to the part of every hold (identity, unit, number, hold) that is late enough."""
    tasks = [_late(hold) for _, _, _, hold in holds]
    late = do_all(fit_stretches, tasks, workshop, lambda wanted: len(wanted) >= WORTH_HOLDS)
    fits = [fits_from_bare(bare) for bare in late]
    whole = [
        (hold.stretches, hold.means) for (*_, hold), found in zip(holds, fits, strict=True) if found is None
    ]
    others = iter(do_all(fit_stretches, whole, workshop, lambda _: False))
    return [
        FittedHold(
            *one, *task, found, found.noise if found is not None else _noise_of(fits_from_bare(next(others)))
        )
        for one, task, found in zip(holds, tasks, fits, strict=True)
    ]


def fit_hold(identity: TrialIdentity, unit: str, number: int, hold: Hold) -> FittedHold:
    """Fit one hold as :func:`fit_holds` does."""
    return fit_holds([(identity, unit, number, hold)], Workshop())[0]


def _late(hold: Hold) -> tuple[Stretches, FloatArray]:
    """Stretches and means of what is left where the first ramp times are left out."""
    earliest = RAMP_TIMES_LEFT_OUT * hold.ramp_s if hold.ramp_s > 0 else 0.0
    kept = hold.stretches.starts_s >= earliest
    late = Stretches(hold.stretches.starts_s[kept], hold.stretches.stops_s[kept], hold.stretches.counts[kept])
    return late, hold.means[kept]


def fit_stretches(task: tuple[Stretches, FloatArray]) -> tuple[tuple[object, ...]]:
    """Fit all forms to stretches and their means; the fits are written down as :func:`bare_fits` does."""
    return (bare_fits(fit_creep(*task)),)


def _noise_of(fits: CreepFits | None) -> BlockNoise | None:
    return fits.noise if fits is not None else None


def verdict_of_hold(hold: Hold) -> tuple[str, str]:
    """Return what the change during *hold* may be called, and the words for it.

    Returns
    -------
    verdict
        ``drift`` only at rest with a recorded and steady temperature (VIM 4.21: measurand and influences
        constant); ``relaxation`` at a kept stretched length and ``creep`` at a kept force (OIML R 60), each
        with a steady temperature; else ``undecided``.
    words
        The verdict, or both that it may be.
    """
    name = "creep" if hold.kept == "force" else "relaxation"
    if hold.temperature.state != "steady" or (hold.kept == "unknown" or hold.place == "unknown"):
        if hold.temperature.state == "not steady":
            return "undecided", f"{name}, drift or temperature"
        return "undecided", f"{name} or drift"
    if hold.kept != "force" and hold.place == "rest":
        return "drift", "drift"
    return name, name


def change_between(first: SignalAt, last: SignalAt, noise: BlockNoise | None) -> tuple[float, float]:
    """Return last less first signal and its standard error (NaN without noise), covariance included."""
    change = last.mean - first.mean
    if noise is None or not math.isfinite(change):
        return change, math.nan
    both = Stretches(
        np.array([first.start_s, last.start_s]),
        np.array([first.stop_s, last.stop_s]),
        np.array([first.count, last.count]),
    )
    covariance = noise.covariance(both)
    return change, math.sqrt(max(covariance[0, 0] + covariance[1, 1] - 2.0 * covariance[0, 1], 0.0))


def hold_row(fitted: FittedHold, scale: HoldScale, x: float, band_percent: float) -> dict[str, object]:
    """Return the row of one hold, columns :data:`HOLD_COLUMNS`.

    Parameters
    ----------
    fitted, scale
        The hold and what it is divided by.
    x
        What was kept, in units of the reference; NaN where unknown.
    band_percent
        Half-width of the band that the settling time is of, in per cent.
    """
    hold, identity = fitted.hold, fitted.identity
    verdict, called = verdict_of_hold(hold)
    return {
        "generation": identity.generation,
        "batch": identity.batch,
        "module": identity.module,
        "sensor": identity.sensor,
        "position": identity.position,
        "session": identity.session,
        "repetition": identity.repetition,
        "started": identity.started,
        "trial": identity.file,
        "hold": fitted.number,
        "strain": x,
        "place": hold.place,
        "kept": hold.kept,
        "duration_s": hold.duration_s,
        "ramp_s": hold.ramp_s,
        "verdict": verdict,
        "called": called,
        "percent_of": scale.percent_of,
        "first_signal": hold.first.mean,
        "unit": fitted.unit,
        "temperature": hold.temperature.state,
        "temperature_mean_c": hold.temperature.mean_c,
        "temperature_range_k": hold.temperature.range_k,
        **_changes(fitted, scale),
        **_decades(fitted, scale),
        **_forms(fitted, scale, band_percent),
        **_per_hour(fitted, scale),
    }


def form_rows(fitted: FittedHold) -> list[dict[str, object]]:
    """Return one row a form that was fitted to the hold, columns :data:`FORM_COLUMNS`."""
    if fitted.fits is None:
        return []
    best = fitted.fits.best.aicc
    shown = {found.name for found in fitted.fits.shown}
    return [
        {
            "generation": fitted.identity.generation,
            "module": fitted.identity.module,
            "sensor": fitted.identity.sensor,
            "trial": fitted.identity.file,
            "session": fitted.identity.session,
            "repetition": fitted.identity.repetition,
            "hold": fitted.number,
            "form": found.name,
            "aicc_above_best": found.aicc - best,
            "shown": found.name in shown,
            "parameters": "; ".join(f"{value:.6g}" for value in found.fit.coefficients),
            "shape": _shape_words(found),
            "residual_sd": found.fit.residual_sd,
            "unit": fitted.unit,
            "evaluations": found.fit.evaluations,
            "converged": found.fit.converged,
            "on_bound": bool(found.fit.on_bound.any()),
        }
        for found in fitted.fits.fits
    ]


def hold_curve(fitted: FittedHold, scale: HoldScale, x: float, change: float) -> HoldCurve:
    """Return the hold as drawn; *change* (per cent) is what holds are ranked by."""
    hold, identity = fitted.hold, fitted.identity
    zero = hold.first.mean
    times = np.geomspace(fitted.late.starts_s[0], hold.duration_s, 80) if fitted.fits else np.zeros(0)
    forms = fitted.fits.shown if fitted.fits is not None else ()
    low, high, mean = (
        (values - zero) * scale.per_cent
        for values in (hold.envelope.low, hold.envelope.high, hold.envelope.mean)
    )
    return HoldCurve(
        generation=identity.generation,
        module=identity.module,
        sensor=identity.sensor,
        session=identity.session,
        repetition=identity.repetition,
        trial=identity.file,
        hold=fitted.number,
        place=hold.place,
        called=verdict_of_hold(hold)[1],
        percent_of=scale.percent_of,
        strain=x,
        change=change,
        times_s=hold.envelope.times_s,
        low=low,
        high=high,
        mean=mean,
        form_times_s=times,
        forms=tuple((found.name, (found.curve(times) - zero) * scale.per_cent) for found in forms),
        samples_s=hold.times_s,
        samples=hold.signal,
        recorded_samples=hold.recorded_samples,
        zero=zero,
        per_cent=scale.per_cent,
    )


def _shape_words(found: FittedForm) -> str:
    parts = []
    for place, name in enumerate(found.form.shape_names):
        value, low, high = found.shape_interval(place)
        limits = f" [{_short(low)}, {_short(high)}]" if math.isfinite(low) else " (on its bound)"
        parts.append(f"{name} = {_short(value)}{limits}")
    return "; ".join(parts)


def _short(value: float) -> str:
    """Return a positive number to three digits without a power of ten."""
    rounded = float(f"{value:.3g}")
    return f"{rounded:.0f}" if rounded >= 1000 else f"{rounded:g}"


def _freedom(fitted: FittedHold) -> int:
    return max(len(fitted.hold.means) - 5, 1)


def _changes(fitted: FittedHold, scale: HoldScale) -> dict[str, object]:
    """Changes from the first settled signal, and between 20 and 30 min, with 95 % limits."""
    hold, signals = fitted.hold, fitted.hold.signals
    t = float(stats.t.ppf(0.975, _freedom(fitted)))
    row: dict[str, object] = {}
    pairs = {
        "change_1min": (hold.first, signals["1 min"]),
        "change_10min": (hold.first, signals["10 min"]),
        "change_1h": (hold.first, signals["1 h"]),
        "change_end": (hold.first, signals["end"]),
        "creep_20_30min": (signals["20 min"], signals["30 min"]),
        "zero_return": (hold.zero_before, hold.zero_after),
    }
    for name, (first, last) in pairs.items():
        change, error = change_between(first, last, fitted.noise)
        estimate, error = change * scale.per_cent, error * abs(scale.per_cent)
        error = math.hypot(error, estimate * scale.relative_uncertainty)
        row[f"{name}_percent_fso"] = estimate
        row[f"{name}_low"], row[f"{name}_high"] = estimate - t * error, estimate + t * error
        if name == "change_1h":
            row["change_1h_standard_error"], row["change_1h_df"] = error, _freedom(fitted)
            row["change_1h_strain"] = change * scale.per_strain
    return row


def _decades(fitted: FittedHold, scale: HoldScale) -> dict[str, object]:
    """Slope per decade for t = 0 at the end and at the beginning of the ramp."""
    nothing = {"percent_fso_per_decade": math.nan, "low": math.nan, "high": math.nan}
    nothing |= {"per_decade_from_ramp_start": math.nan, "per_decade_from_s": math.nan}
    enough = len(fitted.late_means) >= 5 and fitted.late.stops_s[-1] >= 3.0 * fitted.late.starts_s[0]
    if fitted.noise is None or not enough:
        return dict(nothing)
    slope, error, freedom = slope_per_decade(fitted.late, fitted.late_means, fitted.noise)
    ramp = fitted.hold.ramp_s
    from_start = math.nan
    if ramp > 0:
        from_start = slope_per_decade(fitted.late, fitted.late_means, fitted.noise, ramp)[0]
    estimate = slope * scale.per_cent
    spread = math.hypot(error * abs(scale.per_cent), estimate * scale.relative_uncertainty)
    reach = float(stats.t.ppf(0.975, freedom)) * spread
    return {
        "percent_fso_per_decade": estimate,
        "low": estimate - reach,
        "high": estimate + reach,
        "per_decade_from_ramp_start": from_start * scale.per_cent,
        "per_decade_from_s": float(fitted.late.starts_s[0]),
    }


def _forms(fitted: FittedHold, scale: HoldScale, band_percent: float) -> dict[str, object]:
    """Best form, those within two units, settling time or the change in the next decade."""
    row: dict[str, object] = {"form": "", "forms_shown": "", "band_percent_fso": band_percent}
    row |= {"settling_time_s": math.nan, "next_decade_percent_fso": math.nan, "lag_one": math.nan}
    if fitted.fits is None:
        return row
    best, shown = fitted.fits.best, fitted.fits.shown
    row |= {
        "form": best.name,
        "forms_shown": "; ".join(found.name for found in shown),
        "lag_one": fitted.fits.lag_one,
    }
    endless = [found for found in shown if found.name in NEVER_SETTLES]
    if endless:
        end = best.longest_s
        row["next_decade_percent_fso"] = endless[0].change(end, 10.0 * end)[0] * scale.per_cent
    else:
        row["settling_time_s"] = best.settling_time(band_percent / abs(scale.per_cent))
    return row


def _per_hour(fitted: FittedHold, scale: HoldScale) -> dict[str, object]:
    """Line against time of a hold at rest, per cent an hour, with how far autocorrelation widens it."""
    slope = fitted.hold.slope
    names = ("percent_fso_per_hour", "per_hour_low", "per_hour_high", "widening")
    if slope is None or fitted.hold.place != "rest":
        return dict.fromkeys(names, math.nan)
    low, high = sorted(limit * 3600.0 * scale.per_cent for limit in slope.interval())
    return dict(zip(names, (slope.slope * 3600.0 * scale.per_cent, low, high, slope.widening), strict=True))


def holds_frame(rows: list[dict[str, object]]) -> pd.DataFrame:
    """Return the table of holds, sorted by generation, module, sensor, session, repetition and trial."""
    frame = pd.DataFrame(rows, columns=list(HOLD_COLUMNS))
    keys = ["generation", "module", "sensor", "session", "repetition", "trial", "hold"]
    return frame.sort_values(keys, kind="stable", ignore_index=True)
