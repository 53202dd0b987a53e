"""How much calibration is enough? The error of a strain reading against the effort of calibrating.

Every effort is a procedure: which readings make the line, which are read with it. The procedure is carried
out on the campaign itself, leaving out in turn what it is then tried on, and on campaigns drawn from the
fitted model: their errors are what the model predicts. Observed and predicted errors of the same procedure
must agree, or the model is wrong (Stone, J. Roy. Statist. Soc. B 36 (1974) 111, for leaving out; Davison &
Hinkley, *Bootstrap Methods and their Application*, 1997, 4.2, for comparing with draws from a model).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.run_settling import number_runs
from campaign.analyses.shared_work import keep
from campaign.analyses.variance import Variance
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.cell_sums import (
    CellSums,
    lines_without,
    side_by_side,
    squares_of_errors,
    stacked,
    sums_of_cells,
)
from campaign.methods.identifiability import Units, code_units
from campaign.methods.nested_simulation import simulate_deviations
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.workers.workshop import Workshop

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

DRAWN = 400
"""Campaigns drawn from the fitted model."""

CAMPAIGNS_AT_ONCE = 50
"""Campaigns whose errors are worked out together: what is in memory goes with them."""

FAMILY_LEVEL = 0.05
"""Probability that any effort of a sound model is said to disagree (Bonferroni, a generation)."""

EFFORT_COLUMNS = (
    *("generation", "effort", "strain_sd_predicted", "strain_sd_left_out", "strain_expanded", "factor"),
    *("low", "high", "df", "left_out_by", "ratio", "ratio_low", "ratio_high", "agrees", "label"),
)
LEFT_OUT_COLUMNS = (
    "generation",
    "effort",
    "left_out_by",
    "strain_sd_predicted",
    "strain_sd_left_out",
    "ratio",
)

SAME_MOUNTING = "same mounting"
NOTHING_LEFT = "nothing to leave out"


@dataclass(frozen=True)
class CalibrationEffort:
    """Errors of strain readings by calibration effort.

    Attributes
    ----------
    table
        One row a generation and effort, least work first, columns of :data:`EFFORT_COLUMNS`: SDs and expanded
        uncertainties in units of x; ``low`` and ``high`` limit the predicted SD; ``factor`` divides it by
        that of a sensor's own line; ``left_out_by`` is what was left out in turn; ``ratio`` is left-out over
        predicted SD, and ``agrees`` whether it lies between ``ratio_low`` and ``ratio_high``, where a sound
        model keeps the ratios of all efforts of a generation in 95 of 100 campaigns.
    left_out
        The same for everything that can be left out, columns of :data:`LEFT_OUT_COLUMNS`.
    x_low, x_high
        The range that all sensors share, in units of x; all errors are over it.
    drawn
        Campaigns that were drawn from the model.
    notices
        What a reader must know.
    """

    table: pd.DataFrame
    left_out: pd.DataFrame
    x_low: float
    x_high: float
    drawn: int
    notices: tuple[Notice, ...] = ()


@dataclass(frozen=True)
class Effort:
    """A procedure: which unit has a line of its own, and whether the zero is taken anew."""

    name: str
    line_of: str
    rezero: str = ""


EFFORTS = (
    Effort("all", "campaign"),
    Effort("generation", "generation"),
    Effort("generation_rezero_additive", "generation", "additive"),
    Effort("generation_rezero_ratio", "generation", "ratio"),
    Effort("position", "place"),
    Effort("module", "module"),
    Effort("sensor", "sensor"),
    Effort("rezero_additive", "sensor", "additive"),
    Effort("rezero_ratio", "sensor", "ratio"),
)
"""Procedures, least work first; re-zeroing costs one reading a mounting."""

_LEFT_OUT = {
    "campaign": ("module", "sensor", "session", "repetition", "batch"),
    "generation": ("module", "sensor", "session", "repetition", "batch"),
    "place": ("module", "session", "repetition", "batch"),
    "module": ("sensor", "session", "repetition"),
    "sensor": ("session", "repetition"),
}
"""What can be left out of the readings that make a line; the first that the design allows is shown."""


@dataclass(frozen=True)
class Trials:
    """Runs of the campaign and of drawn campaigns, ready for procedures.

    Attributes
    ----------
    codes
        Unit name → code, shape (runs,).
    generation
        Shape (runs,), names.
    made
        Sums over the readings of every run, x and signal centred; campaigns as observed, then as drawn.
    read
        The same over the readings within the common range.
    zeros, zeros_read
        The same over the readings that are the zero of a mounting (of a run where mountings do not repeat).
    zero_x, zero_signal
        Shape (runs,) and (runs, campaigns): that zero reading, centred like the others; NaN where a run has
        none.
    centre
        What was taken off all signals.
    variance_of_x
        Of all readings.
    """

    codes: dict[str, IntArray]
    generation: npt.NDArray[np.object_]
    made: CellSums
    read: CellSums
    zeros: CellSums
    zeros_read: CellSums
    zero_x: FloatArray
    zero_signal: FloatArray
    centre: float
    variance_of_x: float

    @property
    def has_zeros(self) -> bool:
        """Whether every run has a zero reading, and x varies."""
        return bool(np.isfinite(self.zero_x).all()) and self.variance_of_x > 0

    def of_campaigns(self, which: slice) -> Trials:
        """Return some of the campaigns: the first is the observed one, then those drawn."""
        keys = ("made", "read", "zeros", "zeros_read")
        sums = {key: getattr(self, key).of_campaigns(which) for key in keys}
        return replace(self, zero_signal=self.zero_signal[:, which], **sums)


def analyse_calibration_effort(
    calibration: Calibration,
    variance: Variance,
    description: Description,
    workshop: Workshop | None = None,
) -> CalibrationEffort:
    """Compare calibration efforts by the model and by leaving out.

    Parameters
    ----------
    calibration
        Not read beyond what *variance* was fitted to; kept so that all analyses are called alike.
    variance
        The fits.
    description
        Not read: errors are over the range common to all sensors, whatever range is rated.
    workshop
        What earlier runs left; nothing where ``None``.

    Returns
    -------
    CalibrationEffort
        An empty table with a notice where nothing was fitted.
    """
    del calibration, description
    bare = tuple(replace(fit, fit=replace(fit.fit, compressed=None)) for fit in variance.by_generation)
    return keep(_effort, (bare, variance.seed), workshop or Workshop())


def _effort(task: tuple[tuple[GenerationFit, ...], int]) -> tuple[CalibrationEffort]:
    return (effort_of_fits(*task),)


def effort_of_fits(fits: tuple[GenerationFit, ...], seed: int) -> CalibrationEffort:
    """Compare calibration efforts over the readings of *fits*, one a generation.

    Parameters
    ----------
    fits
        Fits of single generations.
    seed
        Seed of the drawn campaigns.
    """
    if not fits:
        notice = _notice(
            "effort-not-compared", "no components of spread were fitted", "efforts are not compared"
        )
        return CalibrationEffort(
            _empty(EFFORT_COLUMNS), _empty(LEFT_OUT_COLUMNS), np.nan, np.nan, 0, (notice,)
        )
    readings = pd.concat([fit.model.readings for fit in fits])
    low, high = common_range(readings)
    trials = _trials(fits, readings, (low, high), np.random.default_rng([seed % 2**63, 1]))
    efforts = _possible_efforts(fits, trials)
    table = pd.DataFrame(list(_rows(efforts, trials)), columns=list(EFFORT_COLUMNS))
    table = _with_agreement(_with_factor(table))
    left_out = pd.DataFrame(list(_left_out_rows(efforts, trials)), columns=list(LEFT_OUT_COLUMNS))
    return CalibrationEffort(table, left_out, low, high, DRAWN, tuple(_disagreements(table)))


def _empty(columns: tuple[str, ...]) -> pd.DataFrame:
    return pd.DataFrame(columns=list(columns))


def _notice(code: str, what: str, done: str, remedy: str = "") -> Notice:
    return Notice(code, "noted", None, None, None, what, done, remedy)


def common_range(readings: pd.DataFrame) -> tuple[float, float]:
    """Return the range of x that all sensors were read over; the whole range where they share none."""
    grouped = readings.groupby(["generation", "module", "sensor"])["x"]
    low, high = float(grouped.min().max()), float(grouped.max().min())
    if high - low <= 1e-3 * float(np.ptp(readings["x"].to_numpy(float))):
        low, high = float(readings["x"].min()), float(readings["x"].max())
    return low, high


def _trials(
    fits: tuple[GenerationFit, ...],
    readings: pd.DataFrame,
    common: tuple[float, float],
    generator: np.random.Generator,
) -> Trials:
    """Add up every run of the campaign and of the drawn ones, generation by generation."""
    units = code_units(readings)
    codes = {
        "campaign": np.zeros(len(readings), dtype=np.int64),
        "generation": units.generation,
        "batch": units.batch,
        "place": units.place,
        "module": units.module,
        "sensor": units.sensor,
        "session": units.session,
        "repetition": units.run,
    }
    if not units.batches_known:
        del codes["batch"]
    x = readings["x"].to_numpy(float)
    margin = 1e-3 * float(np.ptp(x))
    inside = (x >= common[0] - margin) & (x <= common[1] + margin)
    zero_row = _zero_rows(readings, units, fits[0].places["zero"])
    first, cell = _finest([*codes.values(), zero_row])
    centred, centre = x - x.mean(), float(readings["signal"].mean())
    zero_x = np.where(zero_row >= 0, centred[zero_row], np.nan)[first]
    is_zero = zero_row == np.arange(len(x))
    masks = [np.ones_like(inside), is_zero]
    if not inside.all():
        masks += [inside, inside & is_zero]
    sums: list[list[CellSums]] = [[] for _ in masks]
    zero_signal = np.full((len(first), 1 + DRAWN), np.nan)
    start = 0
    for fit in fits:
        rows = slice(start, start := start + len(fit.model.readings))
        own, here = np.unique(cell[rows], return_inverse=True)
        signals = _signals(fit, centre, generator)
        for mask, parts in zip(masks, sums, strict=True):
            of_both = (sums_of_cells(here.ravel(), len(own), centred[rows], s, mask[rows]) for s in signals)
            parts.append(side_by_side(*of_both))
        known = own[zero_row[first[own]] >= 0]
        zero_signal[known] = np.hstack([part[zero_row[first[known]] - rows.start] for part in signals])
        del signals
    whole = [stacked(sums.pop(0)) for _ in masks]
    made, zeros, read, zeros_read = whole if len(whole) == 4 else whole * 2
    return Trials(
        codes={name: code[first] for name, code in codes.items()},
        generation=readings["generation"].to_numpy(object)[first],
        made=made,
        read=read,
        zeros=zeros,
        zeros_read=zeros_read,
        zero_x=zero_x,
        zero_signal=zero_signal,
        centre=centre,
        variance_of_x=float(np.var(x)),
    )


def _finest(codes: list[IntArray]) -> tuple[IntArray, IntArray]:
    """First row of every finest cell, cells in the order of their generations, and the cell of every row."""
    cell = np.zeros(len(codes[0]), dtype=np.int64)
    for code in codes:
        cell = np.unique(cell * (int(code.max()) + 2) + code + 1, return_inverse=True)[1].ravel()
    order = np.unique(cell, return_index=True)[1]
    rank = np.empty_like(order)
    rank[np.argsort(order)] = np.arange(len(order))
    return np.sort(order), rank[cell]


def _signals(
    fit: GenerationFit, centre: float, generator: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Signals as observed and those of campaigns drawn from the fit, less *centre*, (readings, campaigns)."""
    observed = fit.model.readings["signal"].to_numpy(float)[:, np.newaxis] - centre
    drawn = simulate_deviations(fit.model.model, fit.fit.covariances, fit.residual_variance, DRAWN, generator)
    drawn += (fit.model.response - fit.marginal)[:, np.newaxis]
    drawn -= centre
    return observed, drawn


def _zero_rows(readings: pd.DataFrame, units: Units, zero: float) -> IntArray:
    """Row of the first reading at zero of the mounting of each reading, or of its run where none repeats."""
    mounted = units.session if len(np.unique(units.session)) > len(np.unique(units.sensor)) else units.run
    near = np.abs(readings["x"].to_numpy(float) - zero) <= 0.02 * float(np.ptp(readings["x"].to_numpy(float)))
    rows = np.flatnonzero(near)
    order = readings["order"].to_numpy(np.int64)
    rows = rows[np.lexsort((order[rows], number_runs(readings)[rows], mounted[rows]))]
    first = np.full(int(mounted.max()) + 1, -1, dtype=np.int64)
    first[mounted[rows[::-1]]] = rows[::-1]
    return first[mounted]


def _possible_efforts(fits: tuple[GenerationFit, ...], trials: Trials) -> tuple[Effort, ...]:
    """The efforts that this design tells apart."""
    count = {name: len(np.unique(code)) for name, code in trials.codes.items()}
    positions = any(fit.model.counts.position_terms > 0 for fit in fits)
    differs = {
        "campaign": count["generation"] > 1,
        "generation": count["sensor"] > count["generation"],
        "place": positions,
        "module": count["module"] > count["generation"] and count["sensor"] > count["module"],
        "sensor": True,
    }
    return tuple(e for e in EFFORTS if differs[e.line_of] and (trials.has_zeros or not e.rezero))


def _rows(efforts: tuple[Effort, ...], trials: Trials) -> Iterator[dict[str, object]]:
    names = sorted(set(trials.generation))
    for effort in efforts:
        by = _first_possible(effort, trials)
        errors = None if by is None else _squared_errors(effort, by, trials)
        for name in names:
            yield {
                "generation": name,
                "effort": effort.name,
                "left_out_by": by or "",
                "label": _label(effort, by),
                **_summary(errors, trials.generation == name),
            }


def _label(effort: Effort, by: str | None) -> str:
    if by is None:
        return NOTHING_LEFT
    return SAME_MOUNTING if effort.line_of == "sensor" and by == "repetition" else ""


def _first_possible(effort: Effort, trials: Trials) -> str | None:
    """The first unit that can be left out so that something remains for every line."""
    return next((by for by in _LEFT_OUT[effort.line_of] if _is_possible(effort, by, trials)), None)


def _is_possible(effort: Effort, by: str, trials: Trials) -> bool:
    if by not in trials.codes:
        return False
    pairs = np.unique(np.column_stack([trials.codes[effort.line_of], trials.codes[by]]), axis=0)[:, 0]
    parts = np.unique(pairs, return_counts=True)[1]
    return bool(np.mean(parts >= 2) > 0.5)


def _squared_errors(effort: Effort, by: str, trials: Trials) -> tuple[FloatArray, FloatArray]:
    """Readings that a procedure reads in every run, and their sums of squared errors, (runs, 1 + drawn).

    The line is made without the run's unit of *by*; NaN where nothing remains to make a line from. Zero
    readings that a procedure takes anew are not read by it. Some campaigns are worked out at a time.
    """
    runs, campaigns = trials.zero_signal.shape
    squares = np.empty((runs, campaigns))
    for start in range(0, campaigns, CAMPAIGNS_AT_ONCE):
        some = slice(start, start + CAMPAIGNS_AT_ONCE)
        squares[:, some] = _squares_of_campaigns(effort, by, trials.of_campaigns(some))
    counted = trials.read.n - trials.zeros_read.n if effort.rezero else trials.read.n
    return counted, squares


def _squares_of_campaigns(effort: Effort, by: str, trials: Trials) -> FloatArray:
    made, read = trials.made, trials.read
    if effort.rezero:
        made, read = made.without(trials.zeros), read.without(trials.zeros_read)
    if effort.rezero == "ratio":
        unit = trials.zero_signal + trials.centre
        made, read = (sums.rescaled(trials.zero_signal, unit) for sums in (made, read))
    group, left_out = trials.codes[effort.line_of], trials.codes[by]
    intercept, slope = lines_without(made, group, left_out, trials.variance_of_x)
    if effort.rezero == "additive":
        return squares_of_errors(read, trials.zero_signal, slope, trials.zero_x)
    return squares_of_errors(read, intercept, slope)


def _summary(errors: tuple[FloatArray, FloatArray] | None, rows: BoolArray) -> dict[str, float]:
    """Observed and predicted SD of one generation, limits and degrees of freedom of the predicted one."""
    nothing = dict.fromkeys(
        ("strain_sd_predicted", "strain_sd_left_out", "strain_expanded", "low", "high", "df", "ratio"), np.nan
    )
    if errors is None:
        return nothing
    count, squares = (part[rows] for part in errors)
    known = (count > 0) & np.isfinite(squares).all(axis=1)
    if not known.any():
        return nothing
    mean_squares = squares[known].sum(axis=0) / count[known].sum()
    observed, drawn = float(mean_squares[0]), mean_squares[1:]
    predicted, spread = float(drawn.mean()), float(drawn.var(ddof=1))
    freedom = 2 * predicted**2 / spread if spread > 0 else np.inf
    sd = float(np.sqrt(predicted))
    low, high = (float(np.sqrt(freedom / stats.chi2.ppf(q, freedom))) for q in (0.975, 0.025))
    return {
        "strain_sd_predicted": sd,
        "strain_sd_left_out": float(np.sqrt(observed)),
        "strain_expanded": float(stats.t.ppf(0.975, freedom)) * sd,
        "low": sd * low,
        "high": sd * high,
        "df": freedom,
        "ratio": float(np.sqrt(observed / predicted)) if predicted > 0 else np.nan,
    }


def _with_factor(table: pd.DataFrame) -> pd.DataFrame:
    own = table[table["effort"] == "sensor"].set_index("generation")["strain_sd_predicted"]
    return table.assign(factor=table["strain_sd_predicted"] / table["generation"].map(own))


def _with_agreement(table: pd.DataFrame) -> pd.DataFrame:
    """Whether the ratio of left-out to predicted SD is one that the model itself gives.

    The logarithm of a mean square with ν degrees of freedom has a variance of about 2/ν; the limits hold for
    all efforts of a generation together.
    """
    count = table.groupby("generation")["effort"].transform("size")
    reach = stats.norm.ppf(1 - FAMILY_LEVEL / (2 * count.to_numpy(float)))
    factor = np.exp(reach * np.sqrt(0.5 / table["df"].to_numpy(float)))
    inside = (table["ratio"] >= 1 / factor) & (table["ratio"] <= factor)
    known = table["ratio"].notna()
    return table.assign(
        ratio_low=1 / factor, ratio_high=factor, agrees=inside.astype(object).where(known, None)
    )


def _disagreements(table: pd.DataFrame) -> Iterator[Notice]:
    for name, rows in table[table["agrees"].eq(False)].groupby("generation", sort=True):
        efforts = ", ".join(rows["effort"])
        yield _notice(
            "model-is-wrong",
            f"{name}: errors found by leaving out are not those that the model predicts ({efforts})",
            "both are shown; do not rely on the predicted ones",
            "look at the residuals: what repeats there is missing from the model",
        )


def _left_out_rows(efforts: tuple[Effort, ...], trials: Trials) -> Iterator[dict[str, object]]:
    """Observed and predicted SD for everything that can be left out."""
    fewer = trials.of_campaigns(slice(1 + DRAWN // 4))
    for effort in efforts:
        for by in _LEFT_OUT[effort.line_of]:
            if effort.rezero or not _is_possible(effort, by, trials):
                continue
            errors = _squared_errors(effort, by, fewer)
            for name in sorted(set(trials.generation)):
                found = _summary(errors, trials.generation == name)
                yield {"generation": name, "effort": effort.name, "left_out_by": by, **_only(found)}


def _only(found: dict[str, float]) -> dict[str, float]:
    return {key: found[key] for key in ("strain_sd_predicted", "strain_sd_left_out", "ratio")}
