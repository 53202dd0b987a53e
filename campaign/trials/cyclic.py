"""Cyclic trials to loops: what is taken from every cycle, and the few curves that are drawn."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.methods.conditioning import settled_from
from campaign.methods.loops import FRACTIONS, MID, Cycles, Loops, find_cycles, measure_loops, thin_cycles
from campaign.methods.medians import middle_value
from campaign.notices import Notice
from campaign.recordings.recording import FloatArray, Trial, TrialIdentity
from campaign.trials.features import recorded_reference
from campaign.trials.logged_pressure import LoggedPressure, logged_pressure

IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
Columns = dict[str, npt.NDArray[Any]]

FEW_CYCLES = 3
"""With fewer whole cycles nothing can be said about settling."""

WHOLE_SHARE = 0.8
"""A cycle is whole where both branches reach at least this share of the usual amplitude."""

RATE_SPREAD = 0.1
"""Rates of the cycles of one trial that differ by more than this share of their median are not constant."""

LONG_GAP = 10.0
"""Steps of time longer than this multiple of the usual one are gaps."""

CLIPPED_SHARE = 0.02
"""A signal that rests at its largest or smallest value for more than this share of its samples is clipped."""

FEWEST_CLIPPED = 10
"""So many samples in a row at the very end of the signal's range make a clipped stretch."""

OFF_ZERO_SHARE = 0.05
"""Lower turns further from zero strain than this share of the amplitude are not a return to zero."""

DRAWN_CYCLES = (1, 2, 3, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000, 10_000)
"""Cycles of a trial that are drawn, besides the first settled one and the last."""

CYCLE_COLUMNS: dict[str, str] = {
    "cycle": "number of the cycle in its trial, from 1 (as recorded, where it is)",
    "low": "lower end of the range that both branches have in common, units of the recorded reference",
    "high": "upper end of it",
    "mid_width": "signed width at mid range, signal up less signal down",
    "largest_width": "signed width of largest magnitude",
    "at": "where it sits, units of the recorded reference",
    "area": "signed area of the loop",
    "degree": "area over the area under the loading branch of the change of signal",
    "degree_of_whole_signal": "area over the area under the loading branch of the signal as recorded",
    "zero_signal": "signal at the lower end",
    "peak_signal": "signal at the upper end",
    "signal_range": "largest less smallest signal of the loop",
    "rate": "mean speed of both branches, units of the recorded reference a second; NaN without time",
    "whole": "whether both branches reach the usual amplitude",
    "settled": "whether the trial has settled by then",
    "temperature_c": "mean over the cycle, NaN where not recorded",
    "pressure_kpa": "mean over the cycle, NaN where not recorded",
}
"""Columns of :attr:`CyclicFeatures.cycles`; widths and signals are in units of the signal."""


@dataclass(frozen=True)
class LoopCurve:
    """The outline of one cycle, thinned for drawing: values of shape (points,) in order of time."""

    cycle: int
    x: FloatArray
    signal: FloatArray


@dataclass(frozen=True)
class CyclicFeatures:
    """What one cyclic trial is reduced to.

    Attributes
    ----------
    identity, unit
        Whose trial it is, and the unit of its signal.
    recorded
        Quantity of the reference as recorded: ``length``, ``elongation`` (mm) or ``strain`` (mm/mm).
    columns
        By the names of :data:`CYCLE_COLUMNS`, an array of shape (cycles,) each.
    width
        Shape (cycles, places): signed width at the fractions of the range of
        :data:`campaign.methods.loops.FRACTIONS`.
    curves
        Outlines of some cycles.
    notices
        What a reader should know about the trial.
    logged
        What the trial keeps of a pressure that it logs beside its cycles; ``None`` where there is none.
    """

    identity: TrialIdentity
    unit: str
    recorded: str
    columns: Columns
    width: FloatArray
    curves: tuple[LoopCurve, ...]
    notices: tuple[Notice, ...]
    logged: LoggedPressure | None = None

    @cached_property
    def cycles(self) -> pd.DataFrame:
        """The columns as a table: made where it is wanted, since that costs as much as finding them."""
        return pd.DataFrame(self.columns)

    @property
    def settled_from_cycle(self) -> float:
        """Number of the first settled cycle; NaN where the trial does not settle."""
        settled = self.columns["cycle"][self.columns["settled"]]
        return float(settled[0]) if len(settled) else float("nan")

    @property
    def temperature_is_known(self) -> bool:
        """Whether temperature was recorded."""
        return not np.isnan(self.columns["temperature_c"]).all()


def features_of_cyclic(trial: Trial) -> CyclicFeatures:
    """Reduce one cyclic trial to its loops.

    Returns
    -------
    CyclicFeatures
        With no cycles and a notice where none are found; input is never altered.
    """
    reference = recorded_reference(trial)
    if reference is None:
        what = "no known length, elongation or strain in this trial"
        return _no_loops(trial, trial.reference, "reference-not-known", what)
    name, values = reference
    rows = np.flatnonzero(np.isfinite(values))
    x, signal = values[rows], trial.signal[rows]
    cycles = find_cycles(x)
    if cycles.count == 0:
        what = f"no cycle of stretch and release in {len(rows)} rows"
        remedy = "a cyclic trial goes up and comes back; say another kind for other runs"
        return _no_loops(trial, name, "no-cycles", what, remedy)
    time = _times(trial, rows)
    loops = measure_loops(signal, cycles, time)
    table = _cycle_table(trial, rows, cycles, loops)
    notices = (
        *_cycle_notices(trial, table, loops),
        *_sample_notices(trial, x, signal, cycles, time),
        *_zero_notice(trial, name, table),
    )
    curves = _curves(x, signal, cycles, table)
    logged = logged_pressure(trial)
    return CyclicFeatures(
        trial.identity, trial.signal_unit, name, table, loops.width, curves, notices, logged
    )


def _times(trial: Trial, rows: IntArray) -> FloatArray | None:
    """Times of *rows* in s, or ``None`` where they are missing or run backwards."""
    if trial.time_s is None or not trial.time_is_ordered or not np.all(np.isfinite(trial.time_s[rows])):
        return None
    return trial.time_s[rows]


def _cycle_table(trial: Trial, rows: IntArray, cycles: Cycles, loops: Loops) -> Columns:
    """What is kept of every cycle."""
    whole = _are_whole(loops)
    return {
        "cycle": _numbers(trial, rows, cycles),
        "low": loops.low,
        "high": loops.high,
        "mid_width": loops.width[:, MID],
        "largest_width": loops.largest_width,
        "at": loops.at,
        "area": loops.area,
        "degree": loops.degree,
        "degree_of_whole_signal": loops.degree_of_whole_signal,
        "zero_signal": loops.zero_signal,
        "peak_signal": loops.peak_signal,
        "signal_range": loops.signal_range,
        "rate": 2.0 / (1.0 / loops.loading_rate + 1.0 / loops.unloading_rate),
        "whole": whole,
        "settled": _are_settled(loops, whole),
        "temperature_c": _means(trial.temperature_c, rows, cycles),
        "pressure_kpa": _means(trial.pressure_kpa, rows, cycles),
    }


def _are_whole(loops: Loops) -> BoolArray:
    """Cycles that reach the usual amplitude: the median of those above half of the largest."""
    amplitude = loops.high - loops.low
    known = amplitude[np.isfinite(amplitude)]
    if len(known) == 0:
        return np.zeros(len(amplitude), dtype=bool)
    usual = np.median(known[known >= 0.5 * known.max()])
    return np.asarray((amplitude >= WHOLE_SHARE * usual) & np.isfinite(loops.width[:, MID]))


def _are_settled(loops: Loops, whole: BoolArray) -> BoolArray:
    """Whole cycles from the first settled one on; none where the trial does not settle."""
    places = np.flatnonzero(whole)
    series = np.column_stack([loops.width[:, MID], loops.zero_signal, loops.peak_signal])[places]
    span = loops.signal_range[places]
    first = settled_from(series, float(np.median(span)) if len(span) else 0.0)
    settled = np.zeros(len(whole), dtype=bool)
    if first is not None:
        settled[places[first:]] = True
    return settled


def _numbers(trial: Trial, rows: IntArray, cycles: Cycles) -> IntArray:
    """Numbers of the cycles: as recorded at their upper turns where those rise, else counted from 1."""
    counted = np.arange(1, cycles.count + 1)
    if trial.cycle is None:
        return counted
    given = trial.cycle[rows][cycles.tops]
    if not np.all(np.isfinite(given)) or np.any(np.diff(given) <= 0):
        return counted
    return np.asarray(np.round(given)).astype(np.int64)


def _means(values: FloatArray | None, rows: IntArray, cycles: Cycles) -> FloatArray:
    """Mean of a channel over each cycle, NaN where it was not recorded."""
    if values is None:
        return np.full(cycles.count, np.nan)
    own = values[rows]
    known = np.isfinite(own)
    sums = np.concatenate([[0.0], np.cumsum(np.where(known, own, 0.0))])
    held = np.concatenate([[0], np.cumsum(known)])
    total, number = sums[cycles.stops] - sums[cycles.starts], held[cycles.stops] - held[cycles.starts]
    return np.asarray(np.divide(total, number, out=np.full(cycles.count, np.nan), where=number > 0))


def _curves(x: FloatArray, signal: FloatArray, cycles: Cycles, table: Columns) -> tuple[LoopCurve, ...]:
    """Outlines of the cycles that are drawn."""
    settled = np.flatnonzero(table["settled"])
    chosen = (
        {n - 1 for n in DRAWN_CYCLES if n <= cycles.count} | {cycles.count - 1} | set(settled[:1].tolist())
    )
    places = np.array(sorted(chosen), dtype=np.int64)
    kept = thin_cycles(x, signal, cycles.starts[places], cycles.stops[places])
    numbers = table["cycle"]
    return tuple(
        LoopCurve(int(numbers[place]), x[own], signal[own]) for place, own in zip(places, kept, strict=True)
    )


# --- notices


def _note(trial: Trial, code: str, what: str, done: str, remedy: str = "", count: int = 1) -> Notice:
    said = f"sensor {trial.identity.sensor}: {what}" if trial.identity.sensor else what
    return Notice(code, "noted", trial.file, None, None, said, done, remedy, count)


def _no_loops(trial: Trial, recorded: str, code: str, what: str, remedy: str = "") -> CyclicFeatures:
    """No cycles, and the notice that says why."""
    notice = Notice(code, "noted", trial.file, None, None, what, "no loops are taken from it", remedy)
    of_type = {"whole": np.bool_, "settled": np.bool_}
    table: Columns = {name: np.zeros(0, of_type.get(name, np.float64)) for name in CYCLE_COLUMNS}
    width = np.empty((0, len(FRACTIONS)))
    return CyclicFeatures(trial.identity, trial.signal_unit, recorded, table, width, (), (notice,))


def _cycle_notices(trial: Trial, table: Columns, loops: Loops) -> tuple[Notice, ...]:
    """Too few cycles, not settled, unequal amplitudes, holes, rates that change."""
    cycles = len(table["whole"])
    whole = int(np.count_nonzero(table["whole"]))
    cut = cycles - whole
    found: list[Notice] = []
    if whole < FEW_CYCLES:
        what = f"{whole} whole cycles" if whole != 1 else "1 whole cycle"
        done = "loops are taken; whether they settle is not known"
        found.append(_note(trial, "too-few-cycles", what, done, "run at least five cycles"))
    elif not table["settled"].any():
        what = f"the loops still change after {whole} cycles"
        done = "no cycle counts as settled; the last three stand for it"
        found.append(_note(trial, "loops-not-settled", what, done, "run more cycles before measuring"))
    if cut:
        what = f"{cut} of {cycles} cycles are smaller than the others, or lack samples"
        found.append(_note(trial, "cycles-unequal", what, "kept in the table, in no settled figure", "", cut))
    holes = int(np.sum(loops.hole[table["whole"]] > 0.15))
    if holes:
        what = f"{holes} cycles have holes in the samples of a branch"
        done = "no width is taken across a hole"
        found.append(_note(trial, "gap-in-cycles", what, done, "log without pauses", holes))
    return (*found, *_rate_notice(trial, table))


def _rate_notice(trial: Trial, table: Columns) -> tuple[Notice, ...]:
    """Rates of whole cycles that are not one rate; several steady rates in one trial are told as well."""
    rates = table["rate"][table["whole"]]
    rates = rates[~np.isnan(rates)]
    if len(rates) == 0:
        what, done = "no usable time is recorded", "loops are taken, at an unknown rate"
        return (_note(trial, "rate-unknown", what, done, "log the time"),)
    middle = float(np.median(rates))
    apart = int(np.sum(np.abs(rates - middle) > RATE_SPREAD * middle))
    if not apart:
        return ()
    what = f"{apart} of {len(rates)} cycles ran at a rate more than {RATE_SPREAD:.0%} off the median"
    return (_note(trial, "rate-not-constant", what, "every cycle keeps its own rate", "", apart),)


def _sample_notices(
    trial: Trial, x: FloatArray, signal: FloatArray, cycles: Cycles, time: FloatArray | None
) -> tuple[Notice, ...]:
    """Gaps in time, and a signal that rests at the end of its range while the length moves."""
    inside = slice(int(cycles.starts[0]), int(cycles.stops[-1]) + 1)
    found: list[Notice] = []
    if time is not None:
        steps = np.diff(time[inside])
        uneven = len(steps) > 0 and steps.max() > LONG_GAP * steps.min()  # else none is long
        usual = middle_value(steps.copy()) if uneven else 0.0
        gaps = int(np.sum(steps > LONG_GAP * usual)) if usual > 0 else 0
        if gaps:
            longest = f"the longest {float(steps.max()):.3g} s at samples of {usual:.3g} s"
            what = f"{gaps} gaps in time, {longest}" if gaps > 1 else f"one gap in time, {longest}"
            done = "loops are taken from the samples there are"
            found.append(_note(trial, "time-gaps", what, done, "log without pauses", gaps))
    clipped = _clipped(x[inside], signal[inside])
    if clipped:
        what = (
            f"the signal rests at its largest or smallest value in {clipped} samples while the length moves"
        )
        done = "loops are taken as they are; peaks and widths may be too small"
        found.append(_note(trial, "clipped", what, done, "choose a larger range of the readout", clipped))
    return tuple(found)


def _clipped(x: FloatArray, signal: FloatArray) -> int:
    """Samples in long stretches at an end of the signal's range during which the reference moves on."""
    known = np.isfinite(signal)
    own, place = signal[known], x[known]
    if len(own) < 2:
        return 0
    ends = [
        there for end in (own.min(), own.max()) if np.count_nonzero(there := own == end) >= FEWEST_CLIPPED
    ]
    if not ends or len(np.unique(own[:5000])) < 20:
        return 0
    total = 0
    span = float(np.ptp(place))
    for there in ends:
        edges = np.diff(np.concatenate([[0], there.astype(np.int8), [0]]))
        for start, stop in zip(np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)):
            if stop - start >= FEWEST_CLIPPED and np.ptp(place[start:stop]) > 0.02 * span:
                total += int(stop - start)
    return total if total > CLIPPED_SHARE * len(own) else 0


def _zero_notice(trial: Trial, recorded: str, table: Columns) -> tuple[Notice, ...]:
    """Cycles that turn well above zero strain (where it is known), or at different lengths."""
    low, high = (table[name][table["whole"]] for name in ("low", "high"))
    if not len(low):
        return ()
    amplitude = float(np.median(high - low))
    zero = trial.identity.rest_length_mm if recorded == "length" else 0.0
    off = float(np.median(low)) - zero
    if np.isfinite(off) and abs(off) > OFF_ZERO_SHARE * amplitude:
        what = f"the cycles turn {off / amplitude:.0%} of their amplitude away from zero"
        done = "zero signals are those at the lower turn"
        return (_note(trial, "no-return-to-zero", what, done),)
    return ()
