"""Holds to drift curves: means over stretches of time that grow with time, from the end of the ramp on.

A hold of 100,000 samples becomes some hundred means for fitting and an envelope for drawing; changes between
times are taken from the samples themselves.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.allan import (
    AllanDeviation,
    NoiseFloors,
    evenly_sampled,
    noise_floors,
    overlapping_allan_deviation,
)
from campaign.methods.block_noise import Stretches
from campaign.methods.drift_slope import DriftSlope, drift_slope
from campaign.notices import Notice
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.features import recorded_reference
from campaign.trials.hold_course import HoldCourse, KeptLength, find_holds
from campaign.trials.hold_samples import kept_samples

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

MEANS_A_DECADE = 30
"""Means a decade of time that forms are fitted to."""

DRAWN_A_DECADE = 120
"""Buckets a decade of time of the drawn envelope."""

MOST_DRAWN = 500

TIMES_S: dict[str, float] = {
    "1 min": 60.0,
    "10 min": 600.0,
    "20 min": 1200.0,
    "30 min": 1800.0,
    "1 h": 3600.0,
}
"""Times after the end of the ramp at which the signal is read."""

WINDOW_SHARE = 0.05
"""Samples within this share of a time are averaged for the signal at that time."""

SHORTEST_HOLD = 12
"""Fewest samples of a hold."""

STEADY_K = 0.5
"""A temperature that stays within this range, smoothed, counts as steady."""

REST_STRAIN, REST_ELONGATION_MM = 0.005, 0.5
"""A hold within this strain (or elongation, where the rest length is not known) of zero is at rest."""

SLOPE_MEANS = 400
"""Means over equal times that the slope of a hold at rest is fitted to."""

_NAN = float("nan")
GAP_INTERVALS = 5.0
CLIPPED_SHARE = 0.02
STEADY_FORCE_SHARE = 0.01


@dataclass(frozen=True)
class SignalAt:
    """Mean signal over a short stretch of time, NaN where the record does not reach it.

    ``start_s`` and ``stop_s`` are the first and last sample's time after the end of the ramp.
    """

    mean: float
    start_s: float
    stop_s: float
    count: int


@dataclass(frozen=True)
class Envelope:
    """A hold as drawn: buckets of log time, each with its extremes, so that no spike is lost.

    ``times_s`` is the middle of each bucket after the end of the ramp; ``low``, ``high`` and ``mean`` are in
    the unit of the signal; all have shape (buckets,).
    """

    times_s: FloatArray
    low: FloatArray
    high: FloatArray
    mean: FloatArray


@dataclass(frozen=True)
class TemperatureCourse:
    """What temperature did during a hold.

    Attributes
    ----------
    recorded
        Whether it was recorded; if not, the others are NaN.
    mean_c, change_k, range_k
        Mean; last less first tenth; largest less smallest of twenty means over equal times.
    """

    recorded: bool
    mean_c: float
    change_k: float
    range_k: float

    @property
    def state(self) -> str:
        """``not recorded``, ``steady`` (within :data:`STEADY_K`) or ``not steady``."""
        return "not recorded" if not self.recorded else "steady" if self.range_k <= STEADY_K else "not steady"


@dataclass(frozen=True)
class Hold:
    """One length (or force) kept, reduced to what analyses and pages need.

    Attributes
    ----------
    kept_strain, kept_elongation_mm, kept_length_mm
        Means of what was kept; NaN where unknown.
    place
        ``rest``, ``stretched`` or ``unknown`` (no length, or a length without its rest length).
    kept
        ``length``, ``force`` (at constant force the length moves) or ``unknown``.
    duration_s
        From the end of the ramp to the last sample.
    ramp_s
        How long the ramp took; NaN where the recording does not show it: then t = 0 is the first sample.
    stretches, means
        Means over stretches of time, about :data:`MEANS_A_DECADE` a decade, signal units.
    envelope
        What is drawn.
    times_s, signal
        Samples, s after the end of the ramp and signal units: what the figures' files hold. All of them, but
        of very long holds those of :func:`campaign.trials.hold_samples.kept_samples`.
    recorded_samples
        How many samples there were.
    first
        First settled signal: between one and two ramp times after the end of the ramp (without a ramp, the
        first samples).
    signals
        The signal at the times of :data:`TIMES_S`, and at the ``end``.
    zero_before, zero_after
        The signal at the kept lengths before and after where they are one length; else NaN.
    temperature
        What temperature did.
    slope
        Line against time over the whole hold, time in s.
    allan, floors
        Overlapping Allan deviation of a hold at rest; ``None`` where it is not at rest or not sampled evenly.
    """

    kept_strain: float
    kept_elongation_mm: float
    kept_length_mm: float
    place: str
    kept: str
    duration_s: float
    ramp_s: float
    stretches: Stretches
    means: FloatArray
    envelope: Envelope
    times_s: FloatArray
    signal: FloatArray
    recorded_samples: int
    first: SignalAt
    signals: dict[str, SignalAt]
    zero_before: SignalAt
    zero_after: SignalAt
    temperature: TemperatureCourse
    slope: DriftSlope | None
    allan: AllanDeviation | None
    floors: NoiseFloors | None


@dataclass(frozen=True)
class HoldFeatures:
    """What one trial of kind ``hold`` or ``blank`` is reduced to.

    Attributes
    ----------
    identity, unit
        Whose trial it is, and the unit of its signal.
    holds
        The holds of the recording in order; empty with a notice where there are none.
    notices
        What a reader should know about the trial.
    """

    identity: TrialIdentity
    unit: str
    holds: tuple[Hold, ...]
    notices: tuple[Notice, ...]


def features_of_hold(trial: Trial) -> HoldFeatures:
    """Reduce one hold to its drift curve.

    Parameters
    ----------
    trial
        Needs time and signal; length, force and temperature are used where recorded.

    Returns
    -------
    HoldFeatures
        With no holds and a notice where nothing usable is found; input is never altered.
    """
    known = _usable_rows(trial)
    if isinstance(known, Notice):
        return HoldFeatures(trial.identity, trial.signal_unit, (), (known,))
    rows, time = known
    reference = recorded_reference(trial)
    kept_what, courses = _courses(trial, reference, rows)
    if not courses:
        notice = _notice(
            trial,
            "no-hold",
            f"no length is kept for long in {len(rows)} rows",
            "the trial gives no hold",
            "a hold keeps one length; say another kind for other runs",
        )
        return HoldFeatures(trial.identity, trial.signal_unit, (), (notice,))
    holds = tuple(_hold(trial, rows, time, course, kept_what) for course in courses)
    notices = _notices(trial, rows, time, holds)
    return HoldFeatures(trial.identity, trial.signal_unit, holds, tuple(notices))


def features_of_blank(trial: Trial) -> HoldFeatures:
    """Reduce a channel without a sensor, or with a fixed capacitor, as a hold at rest throughout.

    Returns
    -------
    HoldFeatures
        With one hold, of place ``rest``; lengths, if any were logged beside it, mean nothing and are passed
        over.
    """
    known = _usable_rows(trial)
    if isinstance(known, Notice):
        return HoldFeatures(trial.identity, trial.signal_unit, (), (known,))
    rows, time = known
    course = HoldCourse(KeptLength(0, len(rows), float("nan")), None, None, moves=False)
    hold = _hold(trial, rows, time, course, "blank")
    return HoldFeatures(
        trial.identity, trial.signal_unit, (hold,), tuple(_notices(trial, rows, time, (hold,)))
    )


def _usable_rows(trial: Trial) -> tuple[IntArray, FloatArray] | Notice:
    """Rows with time and signal, and their times from the first; a notice where they make no hold."""
    if trial.time_s is None or not trial.time_is_ordered:
        what = "no time was recorded" if trial.time_s is None else "time runs backwards"
        return _notice(
            trial, "hold-without-time", what, "the hold is not analysed", "record the time of every sample"
        )
    rows = np.flatnonzero(np.isfinite(trial.time_s) & np.isfinite(trial.signal))
    if len(rows) < SHORTEST_HOLD or not np.ptp(trial.time_s[rows]) > 0:
        return _notice(
            trial,
            "hold-too-short",
            f"{len(rows)} samples with time and signal",
            "the hold is not analysed",
            f"a hold takes at least {SHORTEST_HOLD} samples",
        )
    return rows, trial.time_s[rows] - trial.time_s[rows[0]]


def _courses(
    trial: Trial, reference: tuple[str, FloatArray] | None, rows: IntArray
) -> tuple[str, tuple[HoldCourse, ...]]:
    """What is kept (length, force or unknown) and the holds, as places among *rows*."""
    whole = (HoldCourse(KeptLength(0, len(rows), float("nan")), None, None, moves=False),)
    if trial.force_n is not None and reference is not None:
        force = _filled(trial.force_n[rows])
        holds = find_holds(force) if force is not None else ()
        length = _filled(reference[1][rows])
        if holds and length is not None and _force_is_kept(force, length, holds):
            return "force", holds
    if reference is None:
        return "unknown", whole
    length = _filled(reference[1][rows])
    return "length", whole if length is None else find_holds(length)


def _force_is_kept(force: FloatArray | None, length: FloatArray, holds: tuple[HoldCourse, ...]) -> bool:
    """Whether force stays and length moves in the longest of the holds found in the force."""
    longest = max(holds, key=lambda own: own.kept.stop - own.kept.start).kept
    inside = slice(longest.start, longest.stop)
    if force is None or longest.level == 0.0:
        return False
    steady = float(np.ptp(force[inside])) <= STEADY_FORCE_SHARE * abs(longest.level)
    moved = abs(float(np.median(length[inside][-9:]) - np.median(length[inside][:9])))
    noise = float(np.median(np.abs(np.diff(length[inside])))) if longest.stop - longest.start > 1 else 0.0
    return steady and moved > max(6.0 * noise, 1e-3 * abs(float(np.median(length[inside]))))


def _filled(values: FloatArray) -> FloatArray | None:
    """Values with missing ones taken from the value before; ``None`` where all are missing."""
    known = np.flatnonzero(np.isfinite(values))
    if len(known) == 0:
        return None
    last = np.maximum(np.searchsorted(known, np.arange(len(values)), side="right") - 1, 0)
    return np.asarray(values[known[last]])


def _hold(trial: Trial, rows: IntArray, time: FloatArray, course: HoldCourse, kept: str) -> Hold:
    inside = slice(course.kept.start, course.kept.stop)
    origin = float(time[course.kept.start])
    ramp = _ramp(time, course)
    t, signal = time[inside] - origin, trial.signal[rows[inside]]
    stretches, means = log_time_means(t, signal)
    strain, elongation, length = (
        _mean_of(values, rows[inside]) for values in (trial.strain, trial.elongation_mm, trial.length_mm)
    )
    place = "rest" if kept == "blank" else _place(strain, elongation)
    allan, floors = _noise_at_rest(t, signal) if place == "rest" else (None, None)
    signals = {name: signal_at(t, signal, at) for name, at in TIMES_S.items()}
    signals["end"] = signal_at(t, signal, float(t[-1]) / (1.0 + WINDOW_SHARE))
    before, after = _zeros(trial, rows, time, course)
    kept_times, kept_signal = kept_samples(t, signal)
    return Hold(
        kept_strain=strain,
        kept_elongation_mm=elongation,
        kept_length_mm=length,
        place=place,
        kept="length" if kept == "blank" else kept,
        duration_s=float(t[-1]),
        ramp_s=ramp,
        stretches=stretches,
        means=means,
        envelope=log_time_envelope(t, signal),
        times_s=kept_times,
        signal=kept_signal,
        recorded_samples=len(signal),
        first=first_settled(t, signal, ramp),
        signals=signals,
        zero_before=before,
        zero_after=after,
        temperature=_temperature(trial, rows[inside]),
        slope=_slope(t, signal),
        allan=allan,
        floors=floors,
    )


def _ramp(time: FloatArray, course: HoldCourse) -> float:
    """Duration of the ramp in s: from the kept length before, else from the first row."""
    if not course.moves:
        return float("nan")
    begun = course.before.stop - 1 if course.before is not None else 0
    return float(time[course.kept.start] - time[begun])


def log_time_means(t: FloatArray, signal: FloatArray) -> tuple[Stretches, FloatArray]:
    """Average a hold over stretches that grow with time, :data:`MEANS_A_DECADE` a decade.

    Parameters
    ----------
    t
        Shape (n,), rising, s after the end of the ramp; samples at 0 are left out.
    signal
        Shape (n,).

    Returns
    -------
    Stretches and ndarray
        One a stretch that holds a sample; means in the unit of *signal*.
    """
    first = _log_time_starts(t, MEANS_A_DECADE)
    counts = np.diff(np.append(first, len(t)))
    last = first + counts - 1
    return Stretches(t[first], t[last], counts), np.add.reduceat(signal, first) / counts


def log_time_envelope(t: FloatArray, signal: FloatArray) -> Envelope:
    """Return lowest, highest and mean signal of log-time buckets.

    Arguments as for :func:`log_time_means`; at most about :data:`MOST_DRAWN` buckets.
    """
    spanned = float(np.log10(t[-1] / _first_positive(t)))
    first = _log_time_starts(t, min(DRAWN_A_DECADE, MOST_DRAWN / max(spanned, 1e-9)))
    counts = np.diff(np.append(first, len(t)))
    return Envelope(
        np.sqrt(t[first] * t[first + counts - 1]),
        np.minimum.reduceat(signal, first),
        np.maximum.reduceat(signal, first),
        np.asarray(np.add.reduceat(signal, first) / counts),
    )


def _first_positive(t: FloatArray) -> float:
    return float(t[np.searchsorted(t, 0.0, side="right")])


def _log_time_starts(t: FloatArray, a_decade: float) -> IntArray:
    """First sample of every log-time bucket that holds one; samples at 0 are left out."""
    begun = int(np.searchsorted(t, 0.0, side="right"))
    buckets = np.floor(np.log10(t[begun:] / t[begun]) * a_decade * (1.0 + 1e-12))
    return begun + np.concatenate([[0], np.flatnonzero(np.diff(buckets) > 0) + 1]).astype(np.int64)


def signal_at(t: FloatArray, signal: FloatArray, at_s: float) -> SignalAt:
    """Return the mean signal within :data:`WINDOW_SHARE` of a time, NaN where there is no sample."""
    first, stop = np.searchsorted(t, [at_s * (1.0 - WINDOW_SHARE), at_s * (1.0 + WINDOW_SHARE)], side="left")
    return _mean_over(t, signal, int(first), int(stop))


def first_settled(t: FloatArray, signal: FloatArray, ramp_s: float) -> SignalAt:
    """Return the first settled signal: between one and two ramp times after the end of the ramp.

    At least three samples; without a ramp the first three. Times and signal have shape (n,).
    """
    if not ramp_s > 0:
        return _mean_over(t, signal, 0, min(3, len(t)))
    first = min(int(np.searchsorted(t, ramp_s, side="left")), max(len(t) - 3, 0))
    stop = int(np.searchsorted(t, 2.0 * ramp_s, side="right"))
    return _mean_over(t, signal, first, min(max(stop, first + 3), len(t)))


def _mean_over(t: FloatArray, signal: FloatArray, first: int, stop: int) -> SignalAt:
    if stop <= first:
        return SignalAt(_NAN, _NAN, _NAN, 0)
    return SignalAt(float(np.mean(signal[first:stop])), float(t[first]), float(t[stop - 1]), stop - first)


def _mean_of(values: FloatArray | None, rows: IntArray) -> float:
    if values is None:
        return float("nan")
    own = values[rows]
    own = own[np.isfinite(own)]
    return float(np.mean(own)) if len(own) else float("nan")


def _place(strain: float, elongation_mm: float) -> str:
    if np.isfinite(strain):
        return "rest" if abs(strain) <= REST_STRAIN else "stretched"
    if np.isfinite(elongation_mm):
        return "rest" if abs(elongation_mm) <= REST_ELONGATION_MM else "stretched"
    return "unknown"


def _zeros(trial: Trial, rows: IntArray, time: FloatArray, course: HoldCourse) -> tuple[SignalAt, SignalAt]:
    """Signal at the kept lengths before and after the hold; NaN unless both are there at one length."""
    unknown = SignalAt(_NAN, _NAN, _NAN, 0)
    before, after = course.before, course.after
    if before is None or after is None:
        return unknown, unknown
    if abs(after.level - before.level) > 0.05 * abs(course.kept.level - before.level):
        return unknown, unknown
    origin = float(time[course.kept.start])
    last_third = before.start + 2 * (before.stop - before.start) // 3
    first = _mean_over(time - origin, trial.signal[rows], last_third, before.stop)
    back = float(time[after.start] - time[course.kept.stop - 1])
    later = slice(after.start, after.stop)
    settled = first_settled(time[later] - time[after.start], trial.signal[rows[later]], back)
    shift = float(time[after.start]) - origin
    return first, SignalAt(settled.mean, settled.start_s + shift, settled.stop_s + shift, settled.count)


def _temperature(trial: Trial, rows: IntArray) -> TemperatureCourse:
    values = np.zeros(0) if trial.temperature_c is None else trial.temperature_c[rows]
    values = values[np.isfinite(values)]
    if len(values) < 2:
        return TemperatureCourse(False, _NAN, _NAN, _NAN)
    parts = [part.mean() for part in np.array_split(values, min(20, len(values)))]
    tenth = max(len(values) // 10, 1)
    change = float(values[-tenth:].mean() - values[:tenth].mean())
    return TemperatureCourse(True, float(values.mean()), change, float(np.ptp(parts)))


def _slope(t: FloatArray, signal: FloatArray) -> DriftSlope | None:
    """Line through means over equal numbers of samples."""
    parts = min(SLOPE_MEANS, len(t))
    edges = np.linspace(0, len(t), parts + 1).astype(np.int64)[:-1]
    counts = np.diff(np.append(edges, len(t)))
    values = np.add.reduceat(signal, edges) / counts
    times = np.add.reduceat(t, edges) / counts
    return drift_slope(times, values) if np.ptp(values) > 0 else None


def _noise_at_rest(t: FloatArray, signal: FloatArray) -> tuple[AllanDeviation | None, NoiseFloors | None]:
    even = evenly_sampled(t, signal)
    if even is None or not np.ptp(signal) > 0:
        return None, None
    allan = overlapping_allan_deviation(*even)
    return (allan, noise_floors(allan)) if len(allan.factors) else (None, None)


# --- notices


def _notices(trial: Trial, rows: IntArray, time: FloatArray, holds: tuple[Hold, ...]) -> Iterator[Notice]:
    missing = len(trial.signal) - len(rows)
    if missing:
        yield _notice(
            trial, "missing-values", f"{missing} rows without a time or a signal", "left out", "", missing
        )
    yield from _gap_notice(trial, time)
    yield from _clipped_notice(trial, rows)
    for hold in holds:
        yield from _hold_notices(trial, hold)
    if holds and not holds[0].temperature.recorded:
        yield _notice(
            trial,
            "temperature-not-recorded",
            "no temperature was recorded during the hold",
            "its change is not called drift",
            "log the temperature beside the signal",
        )


def _hold_notices(trial: Trial, hold: Hold) -> Iterator[Notice]:
    if hold.temperature.state == "not steady":
        yield _notice(
            trial,
            "temperature-not-steady",
            f"temperature moved by {hold.temperature.range_k:.2g} K during the hold",
            "its change is not called drift",
            "keep the temperature steady or measure its effect",
        )
    if hold.ramp_s > 0 and hold.duration_s < 30.0 * hold.ramp_s:
        yield _notice(
            trial,
            "hold-too-short",
            f"the hold lasts {hold.duration_s / hold.ramp_s:.2g} ramp times",
            "forms and slopes have little or nothing to go by",
            "hold for thirty ramp times or more",
        )
    if hold.place == "rest" and hold.allan is None:
        yield _notice(
            trial,
            "not-evenly-sampled",
            "the samples are not evenly spaced in time",
            "no Allan deviation is given",
            "sample at one interval",
        )
    if hold.place == "stretched" and hold.zero_after.count == 0:
        yield _notice(
            trial,
            "no-return-to-zero",
            "the recording does not show the unstretched length before and after the hold",
            "no zero return is given",
            "record the rest length before and after",
        )


def _gap_notice(trial: Trial, time: FloatArray) -> Iterator[Notice]:
    steps = np.diff(time)
    usual = float(np.median(steps))
    gaps = np.flatnonzero(steps > GAP_INTERVALS * usual) if usual > 0 else np.zeros(0, dtype=np.int64)
    # Logs whose interval grows with time pause nowhere: each step is about as long as the one before.
    gaps = np.array([g for g in gaps if g == 0 or steps[g] > GAP_INTERVALS * steps[g - 1]], dtype=np.int64)
    if len(gaps):
        yield _notice(
            trial,
            "time-gaps",
            f"the log pauses {len(gaps)} times, for up to {float(steps[gaps].max()):.3g} s",
            "times are kept as they are; nothing is filled",
            "",
            len(gaps),
        )


def _clipped_notice(trial: Trial, rows: IntArray) -> Iterator[Notice]:
    signal = trial.signal[rows]
    low, high = float(signal.min()), float(signal.max())
    values = len(np.unique(signal[: 2000 * (len(signal) // 2000 or 1) : max(len(signal) // 2000, 1)]))
    for end in (low, high):
        share = float(np.mean(signal == end))
        if high > low and values > 20 and share > CLIPPED_SHARE:
            yield _notice(
                trial,
                "clipped",
                f"the signal rests at {end:.6g} {trial.signal_unit} for {100 * share:.2g} % of the samples",
                "used as it is; figures of this hold may be too small",
                "choose a range of the readout that the signal does not leave",
            )


def _notice(trial: Trial, code: str, what: str, done: str, remedy: str, count: int = 1) -> Notice:
    return Notice(code, "noted", trial.file, None, None, what, done, remedy, count)
