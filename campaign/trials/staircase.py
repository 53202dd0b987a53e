"""Staircases to readings: plateaus of a log over time, or the rows of a table with one row a step.

Everything here works on whole arrays; no step loops over plateaus.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from campaign.methods.autocorrelation import StretchMeans, stretch_means
from campaign.notices import Notice
from campaign.recordings.recording import Trial
from campaign.trials.features import recorded_reference
from campaign.trials.plateaus import SHORTEST_PLATEAU, expand, find_plateaus
from campaign.trials.readings import ReadingPart

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

SETTLING_SHARE = 1.0 / 3.0
"""Share of every dwell that is left out at its beginning, while the sensor settles."""

SETTLED_RISK = 0.001
"""Risk, per trial and shared by its plateaus, of calling a settled plateau not settled."""


@dataclass(frozen=True)
class StaircaseFeatures:
    """What one staircase trial is reduced to.

    Attributes
    ----------
    readings
        The trial's readings, in the order taken.
    notices
        What a reader should know about the trial.
    zero_return
        Last minus first reading at the lowest level, in signal units; NaN where the run does not come back.
    autocorrelation_time
        Integrated autocorrelation time of the samples of a plateau, in samples; NaN for tables.
    """

    readings: ReadingPart
    notices: tuple[Notice, ...]
    zero_return: float
    autocorrelation_time: float


def readings_of_staircase(trial: Trial) -> StaircaseFeatures:
    """Reduce one staircase trial to readings.

    Parameters
    ----------
    trial
        A log over time (plateaus are looked for in the reference, or taken from its ``level`` column), or a
        table with one row a step: no time, or a level in every row that differs from that of the row before.

    Returns
    -------
    StaircaseFeatures
        With no readings and a notice where nothing usable is found; input is never altered.
    """
    reference = recorded_reference(trial)
    if reference is None:
        return _nothing(trial, "reference-not-known", "no known length, elongation or strain in this trial")
    if _is_table(trial):
        return _readings_of_table(trial, reference[1])
    return _readings_of_log(trial, reference[1])


def zero_return(levels: FloatArray, signals: FloatArray) -> float:
    """Return last minus first signal at the lowest level of one run; NaN where it is visited once only.

    ``levels`` (any reference unit) and ``signals`` have shape (readings,), in the order in which they were
    taken.
    """
    if len(levels) < 2:
        return float("nan")
    at_lowest = np.flatnonzero(levels <= levels.min() + _level_tolerance(levels))
    if len(at_lowest) < 2 or at_lowest[-1] - at_lowest[0] < 2:
        return float("nan")
    return float(signals[at_lowest[-1]] - signals[at_lowest[0]])


def plateau_directions(levels: FloatArray) -> npt.NDArray[np.str_]:
    """Return rising, falling or turning for readings at *levels*, shape (readings,), in the order taken.

    A reading is rising when it was approached from below. The first takes the direction of the move after
    it. A reading that was approached from one side and left towards that same side is turning: it belongs
    to neither branch. Repeated readings of one level take the direction of the last move.
    """
    moves = np.diff(levels)
    moves = np.where(np.abs(moves) <= _level_tolerance(levels), 0.0, np.sign(moves))
    before = _carried_forward(np.concatenate([[0.0], moves]))
    after = _carried_forward(np.concatenate([moves, [0.0]])[::-1])[::-1]
    before = np.where(before == 0.0, after, before)
    after = np.where(after == 0.0, before, after)
    names = np.where(before >= 0.0, "rising", "falling")
    return np.asarray(np.where(before * after < 0.0, "turning", names))


# --- tables


def _readings_of_table(trial: Trial, reference: FloatArray) -> StaircaseFeatures:
    """Every row with a reference and a signal is one reading."""
    kept = np.flatnonzero(np.isfinite(reference) & np.isfinite(trial.signal))
    notices = _missing_notice(trial, len(reference) - len(kept), "rows without a reference value or a signal")
    if len(kept) < 2:
        return _nothing(trial, "too-few-readings", f"{len(kept)} usable rows in the table", notices)
    levels = reference[kept]
    given = trial.direction[kept] if trial.direction is not None else np.full(len(kept), np.nan)
    timed = trial.time_s is not None and trial.time_is_ordered
    times = trial.time_s[kept] - trial.time_s[kept[0]] if timed and trial.time_s is not None else np.nan
    columns = _means_of_channels(trial, kept, np.ones(len(kept), dtype=np.int64))
    columns |= {
        "direction": _given_directions(levels, given),
        "signal": trial.signal[kept],
        "standard_error": np.full(len(kept), np.nan),
        "count": np.ones(len(kept), dtype=np.int64),
        "effective_count": np.ones(len(kept)),
        "time_s": times,
        "time_since_motion_s": np.nan,
        "dwell_s": np.nan,
        "largest_before": _largest_before(levels),
        "settled": True,
    }
    return StaircaseFeatures(
        _reading_part(trial, columns, len(kept)),
        notices,
        zero_return(levels, trial.signal[kept]),
        float("nan"),
    )


def _given_directions(levels: FloatArray, given: FloatArray) -> npt.NDArray[np.str_]:
    """Directions as the table gives them (up 1, down −1); found from the levels where it does not.

    The reading at the turn counts for neither branch, unless the table lists the turning level once a branch.
    """
    found = plateau_directions(levels)
    named = np.where(given > 0, "rising", "falling")
    known = np.isfinite(given) & (given != 0)
    repeated = np.zeros(len(levels), dtype=bool)
    same = (np.abs(np.diff(levels)) <= _level_tolerance(levels)) & (np.diff(given) != 0)
    repeated[:-1] |= same
    repeated[1:] |= same
    turning = (found == "turning") & ~(known & repeated)
    return np.asarray(np.where(turning, "turning", np.where(known, named, found)))


# --- logs


def _readings_of_log(trial: Trial, reference: FloatArray) -> StaircaseFeatures:
    """Find plateaus, leave the settling parts out, average the rest."""
    rows = np.flatnonzero(np.isfinite(reference))
    notices = _missing_notice(trial, len(reference) - len(rows), "rows without a reference value")
    starts, stops = _plateaus_of_log(trial, reference, rows)
    if len(starts) < 2:
        return _nothing(
            trial,
            "no-plateaus",
            f"{len(starts)} stretches of constant reference in {len(rows)} rows",
            notices,
            remedy="a staircase needs at least two levels that are held; say another kind for other runs",
        )
    averaged, counts, plateau = _averaged_rows(trial, rows, starts, stops)
    notices += _missing_notice(
        trial, len(starts) - len(counts), "plateaus without any signal", code="plateau-without-signal"
    )
    if len(counts) < 2:
        return _nothing(trial, "too-few-readings", f"{len(counts)} plateaus with a signal", notices)
    times, timed = _times(trial, len(reference))
    means = stretch_means(
        trial.signal.take(averaged), times.take(averaged), counts, resolution=_resolution_of(trial)
    )
    settled = _settled(means)
    notices += _settled_notice(trial, settled)
    begun, ended = times[rows[starts[plateau]]], times[rows[stops[plateau] - 1]]
    middle = _stretch_mean(times.take(averaged), counts)
    columns = _means_of_channels(trial, averaged, counts)
    levels = _stretch_mean(reference.take(averaged), counts)
    unknown = np.full(len(counts), np.nan)
    columns |= {
        "direction": plateau_directions(levels),
        "signal": means.means,
        "standard_error": means.standard_errors,
        "count": counts,
        "effective_count": means.effective_counts,
        "time_s": middle - times[rows[0]] if timed else unknown,
        "time_since_motion_s": middle - begun if timed else unknown,
        "dwell_s": ended - begun if timed else unknown,
        "largest_before": _largest_before(levels),
        "settled": settled,
    }
    return StaircaseFeatures(
        _reading_part(trial, columns, len(counts)),
        notices,
        zero_return(levels, means.means),
        means.autocorrelation_time,
    )


def _plateaus_of_log(trial: Trial, reference: FloatArray, rows: IntArray) -> tuple[IntArray, IntArray]:
    """Plateaus as places among *rows*: from the level column where there is one, else from the reference."""
    if trial.level is None:
        return find_plateaus(reference[rows] if len(rows) < len(reference) else reference)
    level = trial.level[rows]
    changes = np.flatnonzero(np.diff(level) != 0) + 1
    starts, stops = np.concatenate([[0], changes]), np.concatenate([changes, [len(level)]])
    known = np.isfinite(level[starts]) & (stops - starts >= SHORTEST_PLATEAU)
    return starts[known].astype(np.int64), stops[known].astype(np.int64)


def _averaged_rows(
    trial: Trial, rows: IntArray, starts: IntArray, stops: IntArray
) -> tuple[IntArray, IntArray, IntArray]:
    """Rows that are averaged, how many a plateau, and which plateaus they belong to.

    The first third of every dwell is left out, and the last sample of a long one (the next ramp may have
    begun).
    """
    lengths = stops - starts
    first = starts + np.ceil(lengths * SETTLING_SHARE).astype(np.int64)
    last = stops - (lengths >= 2 * SHORTEST_PLATEAU)
    last = np.maximum(last, first + 1)
    places, plateau = expand(first, last)
    chosen = rows.take(places)
    finite = np.isfinite(trial.signal.take(chosen))
    if finite.all():
        return chosen, last - first, np.arange(len(starts))
    counts = np.bincount(plateau[finite], minlength=len(starts)).astype(np.int64)
    return chosen[finite], counts[counts > 0], np.flatnonzero(counts)


def _settled(means: StretchMeans) -> BoolArray:
    """False where the slope over the averaged part is significant (Bonferroni over the plateaus)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.abs(means.slopes / means.slope_standard_errors)
    p = 2.0 * special.stdtr(means.slope_degrees_of_freedom, -ratio)
    return np.asarray(~(p < SETTLED_RISK / len(p)))


def _resolution_of(trial: Trial) -> float:
    """Resolution as stated, else the smallest step between two values of the recording."""
    if np.isfinite(trial.signal_resolution):
        return float(trial.signal_resolution)
    distinct = np.unique(trial.signal[np.isfinite(trial.signal)])
    steps = np.diff(distinct)
    steps = steps[steps > 1e-12 * max(float(np.abs(distinct).max(initial=0.0)), 1e-300)]
    return float(steps.min(initial=np.inf)) if len(steps) else 0.0


def _times(trial: Trial, rows: int) -> tuple[FloatArray, bool]:
    """Times in s, and whether they may be shown; row numbers where time is missing or runs backwards."""
    if trial.time_s is None or not trial.time_is_ordered or not np.all(np.isfinite(trial.time_s)):
        return np.arange(rows, dtype=float), False
    return trial.time_s, True


# --- both


def _is_table(trial: Trial) -> bool:
    """One row a step: no time recorded, or a level column that changes in every row."""
    if trial.level is not None:
        known = trial.level[np.isfinite(trial.level)]
        held = np.diff(known) == 0
        return len(known) < 2 or float(held.mean()) < 0.2
    return trial.time_s is None


def _level_tolerance(levels: FloatArray) -> float:
    """Levels closer than this are one: 1 % of the span, or a fifth of the typical step if that is less."""
    span = float(np.ptp(levels)) if len(levels) else 0.0
    moves = np.abs(np.diff(levels))
    steps = moves[moves > 0.002 * span]
    return min(0.01 * span, 0.2 * float(np.median(steps)) if len(steps) else 0.0)


def _carried_forward(values: FloatArray) -> FloatArray:
    """Zeros replaced by the last value before them that is not zero."""
    places = np.maximum.accumulate(np.where(values != 0.0, np.arange(len(values)), 0))
    return np.asarray(values[places])


def _largest_before(levels: FloatArray) -> IntArray:
    """Place of the largest level among the readings before each (the reading itself for the first)."""
    largest = np.maximum.accumulate(levels)
    places = np.maximum.accumulate(np.where(levels >= largest, np.arange(len(levels)), 0))
    return np.concatenate([[0], places[:-1]]).astype(np.int64)


def _stretch_mean(values: FloatArray, counts: IntArray) -> FloatArray:
    """Mean of the finite values of consecutive stretches of so many values; NaN where there are none."""
    stretch = np.repeat(np.arange(len(counts)), counts)
    sums = np.bincount(stretch, values)  # one by one: seeds are taken from these means
    if np.isfinite(sums).all():
        return np.asarray(sums / counts)
    finite = np.isfinite(values)
    held = np.bincount(stretch, finite)
    sums = np.bincount(stretch, np.where(finite, values, 0.0))
    return np.asarray(np.divide(sums, held, out=np.full(len(counts), np.nan), where=held > 0))


def _means_of_channels(trial: Trial, rows: IntArray, counts: IntArray) -> dict[str, object]:
    """Means over the averaged rows of every channel that a reading keeps, *counts* rows a reading."""
    unknown = np.full(len(counts), np.nan)
    channels = {
        "strain": trial.strain,
        "elongation_mm": trial.elongation_mm,
        "length_mm": trial.length_mm,
        "temperature_c": trial.temperature_c,
        "humidity_percent": trial.humidity_percent,
        "pressure_kpa": trial.pressure_kpa,
    }
    return {
        name: _stretch_mean(values.take(rows), counts) if values is not None else unknown.copy()
        for name, values in channels.items()
    }


def _reading_part(trial: Trial, columns: dict[str, object], count: int) -> ReadingPart:
    """The readings of one trial with its identity."""
    identity = trial.identity
    whose: dict[str, object] = {
        "generation": identity.generation,
        "batch": identity.batch,
        "module": identity.module,
        "sensor": identity.sensor,
        "position": identity.position,
        "session": identity.session,
        "repetition": identity.repetition,
        "trial": identity.file,
        "started": identity.started,
        "channel": identity.channel,
        "unit": trial.signal_unit,
        "reference": trial.reference,
        "rest_length_mm": identity.rest_length_mm,
        "rest_length_uncertainty_mm": identity.rest_length_uncertainty_mm,
        "order": np.arange(1, count + 1),
    }
    return ReadingPart(whose | columns, count)


def _nothing(
    trial: Trial, code: str, what: str, before: tuple[Notice, ...] = (), remedy: str = ""
) -> StaircaseFeatures:
    """No readings, and the notice that says why."""
    notice = Notice(code, "noted", trial.file, None, None, what, "no readings are taken from it", remedy)
    return StaircaseFeatures(ReadingPart({}, 0), (*before, notice), float("nan"), float("nan"))


def _missing_notice(
    trial: Trial, missing: int, what: str, code: str = "missing-values"
) -> tuple[Notice, ...]:
    """A notice that counts rows or plateaus left out, if any."""
    if missing == 0:
        return ()
    return (
        Notice(
            code, "noted", trial.file, None, None, f"{missing} {what}", "left out of readings", "", missing
        ),
    )


def _settled_notice(trial: Trial, settled: BoolArray) -> tuple[Notice, ...]:
    """A notice that counts plateaus which still move."""
    moving = int(np.sum(~settled))
    if moving == 0:
        return ()
    places = ", ".join(str(place + 1) for place in np.flatnonzero(~settled)[:8])
    return (
        Notice(
            "not-settled",
            "noted",
            trial.file,
            None,
            None,
            f"sensor {trial.identity.sensor}: the signal still moves at reading {places} while averaged",
            "readings kept and marked as not settled",
            "dwell longer at these levels",
            moving,
        ),
    )
