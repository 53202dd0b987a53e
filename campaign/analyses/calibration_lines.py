"""Lines of runs and of sensors, branch by branch; run-to-run covariance pooled where runs are few."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import special

from campaign.analyses.level_cells import LevelCells, level_cells
from campaign.analyses.reference_covariance import shared_covariance
from campaign.analyses.used_readings import FALLING, RISING, TURNING, UsedReadings
from campaign.methods.calibration_line import (
    GroupLines,
    LackOfFit,
    at_zero,
    fit_lines,
    lack_of_fit_of_runs,
    line_of_runs,
    pooled_lack_of_fit,
)
from campaign.methods.run_spread import (
    ONE_MOUNTING,
    RunScatter,
    RunSpread,
    line_of_mountings,
    scatter_in_mountings,
    spread_of_runs,
)
from campaign.methods.step_hysteresis import StepHysteresis, step_hysteresis
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.trials.readings import RUN_KEYS, SENSOR_KEYS
from campaign.trials.staircase import zero_return

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

OWN_RUNS = "this sensor's runs"
POOLED = "pooled over sensors"
UNKNOWN = "run-to-run error unknown"

ENOUGH_OWN_DEGREES = 10
"""From this many degrees of freedom on (R − 1) a sensor's own runs carry its interval."""

HETEROGENEITY_RISK = 0.001
"""A sensor whose runs scatter more than the pool's by an F test at this risk keeps its own covariance."""

REACHED_SHARE = 0.98
"""The rated range counts as reached from this share of it on."""


@dataclass(frozen=True)
class BranchLine:
    """The line of one sensor and branch. Signals in the sensor's unit, x in that of the campaign's reference.

    Attributes
    ----------
    generation, module, sensor, position, branch, unit
        Whose line it is.
    rows
        Places of its readings among the used readings.
    cells
        The readings gathered by direction, level and run.
    run_codes, run_lines
        Codes of the runs in that table, and their own lines, in the same order.
    intercept, slope
        The line.
    covariance, run_covariance
        Shape (2, 2): of (intercept, slope), reference uncertainty included, and of a new run's line about
        it; NaN with one run and nothing to pool with.
    fit_covariance, fit_variance
        ``covariance`` before the uncertainty of the reference is added, and what it makes at the mean x.
    mounting_covariance, mountings
        The part of ``run_covariance`` that a new mounting makes, and whether it is told from runs
        (:data:`campaign.methods.run_spread.APART` and its like).
    reference_covariance
        What the uncertainty of the reference adds to ``fit_covariance``.
    residual_sd
        SD within runs about the runs' own lines.
    residual_variance, residual_degrees, lack_of_fit_variance
        Noise of one reading about its run, without lack of fit, its degrees of freedom, and lack of fit.
    lack_of_fit
        The test of level against level × run within directions; None where it cannot be made.
    hysteresis
        Differences of branches at common levels; None with one branch.
    direction_half_width
        Half the root-mean-square loop width for both branches, else 0.
    degrees_of_freedom, effective_degrees
        Between runs (and mountings); and of everything that averaging does not reduce, at mid range.
    variance_source
        Where the covariance between runs is from.
    full_scale_output, full_scale
        Output over the rated range, or over the range measured, and which of the two ('rated' or 'measured').
    """

    generation: str
    module: str
    sensor: str
    position: str
    branch: str
    unit: str
    rows: IntArray
    cells: LevelCells
    run_codes: IntArray
    run_lines: GroupLines
    intercept: float
    slope: float
    covariance: FloatArray
    fit_covariance: FloatArray
    fit_variance: float
    run_covariance: FloatArray
    mounting_covariance: FloatArray
    mountings: str
    reference_covariance: FloatArray
    residual_sd: float
    residual_variance: float
    residual_degrees: float
    lack_of_fit_variance: float
    lack_of_fit: LackOfFit | None
    hysteresis: StepHysteresis | None
    direction_half_width: float
    degrees_of_freedom: float
    effective_degrees: float
    variance_source: str
    full_scale_output: float
    full_scale: str

    @property
    def key(self) -> tuple[str, str, str]:
        """Generation, module and sensor."""
        return self.generation, self.module, self.sensor

    @property
    def runs(self) -> int:
        """Number of runs."""
        return len(self.run_codes)

    def variance_between_runs(self, x: float) -> float:
        """Variance of a new run's line about the sensor's at *x*, signal units squared."""
        place = np.array([1.0, x])
        return float(place @ self.run_covariance @ place)


@dataclass(frozen=True)
class _RunFits:
    """Runs of one sensor and branch before pooling; coefficients are at the sensor's mean x, and slope."""

    rows: IntArray
    span: tuple[float, float]
    run_codes: IntArray
    mounting: IntArray
    lines: GroupLines
    centre: float
    coefficients: FloatArray
    within: FloatArray
    noise: float
    noise_degrees: float
    lack: LackOfFit | None
    residual_sd: float

    @property
    def degrees(self) -> int:
        """Degrees of freedom between runs."""
        return len(self.run_codes) - 1

    @property
    def scatter(self) -> RunScatter:
        """Scatter of its runs, within and between mountings."""
        return scatter_in_mountings(self.coefficients, self.within, self.mounting)


@dataclass(frozen=True)
class _Pool:
    """Scatter of runs over the sensors of one generation and branch, in the basis of each sensor's mean x."""

    scatter: RunScatter | None
    sensors: int


def branch_lines(
    used: UsedReadings, reference: ReferenceQuantity, description: Description
) -> tuple[BranchLine, ...]:
    """Return the lines of all sensors, sorted; for each sensor both branches, rising, falling."""
    fits: dict[tuple[int, str], _RunFits] = {}
    order = np.argsort(used.sensor, kind="stable")
    bounds = np.flatnonzero(np.diff(used.sensor[order])) + 1
    for rows in np.split(order, bounds) if len(order) else []:
        span = float(used.x[rows].min()), float(used.x[rows].max())
        for branch, part in _branches(rows, used.direction[rows]).items():
            fit = _fit_runs(used, part, branch, span)
            if fit is not None:
                fits[int(used.sensor[rows[0]]), branch] = fit
    alike = {
        key: (used.text("generation", int(fit.rows[0])), used.text("unit", int(fit.rows[0])), key[1])
        for key, fit in fits.items()
    }
    pools = _pools(fits, alike)
    return tuple(
        _branch_line(used, key[1], fit, pools[alike[key]], reference, description)
        for key, fit in fits.items()
    )


def line_of_sensor(lines: tuple[BranchLine, ...]) -> dict[tuple[str, str, str], BranchLine]:
    """Return the line that stands for each sensor: both branches, else the only one that was run."""
    chosen: dict[tuple[str, str, str], BranchLine] = {}
    for line in lines:
        chosen.setdefault(line.key, line)
    return chosen


def run_lines_frame(used: UsedReadings, lines: tuple[BranchLine, ...]) -> pd.DataFrame:
    """Return one row a run and branch; columns as in ``Calibration.run_lines``."""
    names = [*SENSOR_KEYS, "position", *RUN_KEYS[3:]]
    columns = [*names, "branch", "intercept", "slope", "residual_sd", "readings", "x_low", "x_high"]
    if not lines:
        return pd.DataFrame(columns=[*columns, "zero_return", "zero_return_percent_fso"])
    first = np.unique(used.run, return_index=True)[1]
    codes = np.concatenate([line.run_codes for line in lines])
    counts = np.concatenate([line.run_lines.counts for line in lines])
    runs, outputs = [line.runs for line in lines], [line.full_scale_output for line in lines]
    ends = np.hstack([_ends_of_runs(used.x[line.rows], used.run[line.rows]) for line in lines])
    returns = _zero_returns(used)[codes]
    table = pd.DataFrame({name: used.table[name].to_numpy()[first[codes]] for name in names})
    table["branch"] = np.repeat([line.branch for line in lines], runs)
    table["intercept"] = np.concatenate([line.run_lines.intercepts for line in lines])
    table["slope"] = np.concatenate([line.run_lines.slopes for line in lines])
    table["residual_sd"] = np.concatenate([_residual_sds(line.run_lines) for line in lines])
    table["readings"] = counts
    table["x_low"], table["x_high"] = ends
    table["zero_return"] = returns
    table["zero_return_percent_fso"] = 100.0 * returns / np.repeat(outputs, runs)
    return table


def _ends_of_runs(x: FloatArray, run: IntArray) -> FloatArray:
    """Least and largest x of every run, in the order of their codes: shape (2, runs)."""
    order = np.argsort(run, kind="stable")
    first = np.flatnonzero(np.diff(run[order], prepend=-1))
    return np.stack([np.minimum.reduceat(x[order], first), np.maximum.reduceat(x[order], first)])


def _zero_returns(used: UsedReadings) -> FloatArray:
    """Zero return of every run, by its code."""
    order = np.lexsort((used.table["order"].to_numpy(), used.run))
    bounds = np.flatnonzero(np.diff(used.run[order])) + 1
    return np.array([zero_return(used.x[rows], used.signal[rows]) for rows in np.split(order, bounds)])


def _residual_sds(lines: GroupLines) -> FloatArray:
    """Residual standard deviation of every run about its own line; NaN without degrees of freedom."""
    degrees = lines.counts - 2
    squares = lines.residual_sums_of_squares / np.where(degrees > 0, degrees, 1)
    return np.where(degrees > 0, np.sqrt(squares), np.nan)


def _branches(rows: IntArray, direction: IntArray) -> dict[str, IntArray]:
    """Readings by branch, the one that stands for the sensor first: both, unless all are of one.

    Where most readings turn, as with levels in random order, there are no branches.
    """
    parts = {"rising": rows[direction == RISING], "falling": rows[direction == FALLING]}
    whole = {branch: part for branch, part in parts.items() if len(part) == len(rows)}
    if np.mean(direction == TURNING) > 0.5:
        return {"both": rows}
    return whole or {"both": rows, **parts}


def _fit_runs(used: UsedReadings, rows: IntArray, branch: str, span: tuple[float, float]) -> _RunFits | None:
    """Lines of the runs of one sensor and branch; None where no run has enough levels for one."""
    rows = _rows_of_fitted_runs(used, rows, 2 if branch == "both" else 3)
    if len(rows) == 0:
        return None
    codes, run = _codes(used.run[rows])
    x, y = used.x[rows], used.signal[rows]
    lines = fit_lines(x, y, run, len(codes), used.weights[rows])
    degrees = float(np.sum(lines.counts - 2))
    own = float(np.sum(lines.residual_sums_of_squares)) / degrees if degrees > 0 else float("nan")
    direction = _sides(used.direction[rows])
    lack = _lack_of_fit(x, y, used.level[rows], direction, run)
    noise, noise_degrees = _noise(x, y, direction, run, lack)
    centre = float(x.mean())
    within = noise * np.stack([_inverse_design(lines, place, centre) for place in range(len(codes))])
    coefficients = np.column_stack([lines.values(centre), lines.slopes])
    return _RunFits(
        rows,
        span,
        codes,
        used.mounting[rows[np.unique(run, return_index=True)[1]]],
        lines,
        centre,
        coefficients,
        within,
        noise,
        noise_degrees,
        lack,
        float(np.sqrt(own)),
    )


def _codes(values: IntArray) -> tuple[IntArray, IntArray]:
    """Distinct values and the place of each value among them."""
    distinct, place = np.unique(values, return_inverse=True)
    return distinct, place.astype(np.int64)


def _rows_of_fitted_runs(used: UsedReadings, rows: IntArray, fewest: int) -> IntArray:
    """Rows of the runs with at least *fewest* readings and more than one x."""
    codes, run = _codes(used.run[rows])
    lines = fit_lines(used.x[rows], used.signal[rows], run, len(codes))
    return rows[((lines.counts >= fewest) & np.isfinite(lines.slopes))[run]]


def _inverse_design(lines: GroupLines, place: int, centre: float) -> FloatArray:
    """(X'X)⁻¹ of one run for (value at *centre*, slope)."""
    mass, sxx = float(lines.masses[place]), float(lines.x_sums_of_squares[place])
    gap = centre - float(lines.x_means[place])
    return np.array([[1.0 / mass + gap**2 / sxx, gap / sxx], [gap / sxx, 1.0 / sxx]])


def _sides(direction: IntArray) -> IntArray:
    """Directions; all one where most readings turn, as where levels come in random order."""
    return np.zeros_like(direction) if np.mean(direction == TURNING) > 0.5 else direction


def _lack_of_fit(
    x: FloatArray, y: FloatArray, level: FloatArray, direction: IntArray, run: IntArray
) -> LackOfFit | None:
    """Level against level × run within directions, each run and direction with its own line."""
    parts = []
    for side in (RISING, FALLING):
        chosen = np.flatnonzero((direction == side) & np.isfinite(level))
        if len(chosen) == 0:
            continue
        runs, own_run = _codes(run[chosen])
        lines = fit_lines(x[chosen], y[chosen], own_run, len(runs))
        dx = x[chosen] - lines.x_means[own_run]
        residual = y[chosen] - lines.y_means[own_run] - lines.slopes[own_run] * dx
        kept = np.isfinite(residual)
        part = lack_of_fit_of_runs(residual[kept], own_run[kept], _codes_of_levels(level[chosen][kept]))
        parts += [part] if part is not None else []
    return pooled_lack_of_fit(parts, float(len(np.unique(run))))


def _codes_of_levels(level: FloatArray) -> IntArray:
    return np.unique(level, return_inverse=True)[1].astype(np.int64)


def _noise(
    x: FloatArray, y: FloatArray, direction: IntArray, run: IntArray, lack: LackOfFit | None
) -> tuple[float, float]:
    """Variance of a reading about its run, by level × run or else about branch lines; its degrees."""
    if lack is not None and lack.mean_square_error > 0:
        return lack.mean_square_error, float(lack.second_degrees)
    sided = direction != TURNING
    for group in (run[sided] * 2 + direction[sided], run):
        inside = sided if len(group) < len(x) else np.ones(len(x), dtype=bool)
        codes, own = _codes(group)
        lines = fit_lines(x[inside], y[inside], own, len(codes))
        fitted = np.isfinite(lines.slopes)
        degrees = float(np.sum((lines.counts - 2)[fitted]))
        if degrees > 0:
            squares = float(np.sum(lines.residual_sums_of_squares[fitted]))
            return max(squares / degrees, _smallest(y)), degrees
    return _smallest(y), 1.0


def _smallest(y: FloatArray) -> float:
    """A variance at the level of rounding, so that exact data do not divide by zero."""
    return float((1e-12 * max(float(np.max(np.abs(y))), 1e-300)) ** 2)


def _pools(
    fits: dict[tuple[int, str], _RunFits], alike: dict[tuple[int, str], tuple[str, str, str]]
) -> dict[tuple[str, str, str], _Pool]:
    """Scatter of runs pooled over sensors that are alike: of one generation, unit and branch."""
    gathered: dict[tuple[str, str, str], list[_RunFits]] = {}
    for key, fit in fits.items():
        gathered.setdefault(alike[key], []).append(fit)
    pools = {}
    for name, members in gathered.items():
        several = [fit.scatter for fit in members if fit.degrees > 0]
        pools[name] = _Pool(sum(several[1:], several[0]) if several else None, len(several))
    return pools


def _spread_of(fit: _RunFits, pool: _Pool) -> tuple[RunSpread, str]:
    """Spread of true run lines for one sensor and where it is from; NaN where it is unknown."""
    if fit.degrees == 0 or pool.scatter is None:
        unknown = np.full((2, 2), np.nan)
        return RunSpread(unknown, unknown, float("nan"), ONE_MOUNTING), UNKNOWN
    own = fit.scatter
    if fit.degrees >= ENOUGH_OWN_DEGREES or pool.sensors < 2 or _scatters_more(own, pool.scatter):
        return spread_of_runs(own), OWN_RUNS
    return spread_of_runs(pool.scatter), POOLED


def _scatters_more(own: RunScatter, pool: RunScatter) -> bool:
    """Whether this sensor's runs scatter more at its mean x than the other sensors' do, beyond chance.

    Mountings and runs within them are compared apart: their mean squares differ, and a sum of the two would
    make a sensor with one odd mounting look like one that scatters.
    """
    sources = (
        (own.between, pool.between, own.between_degrees, pool.between_degrees),
        (own.within, pool.within, own.within_degrees, pool.within_degrees),
    )
    risks = [_risk(*source) for source in sources]
    return bool(len(risks) * min(risks) < HETEROGENEITY_RISK)


def _risk(own: FloatArray, pool: FloatArray, own_degrees: int, pool_degrees: int) -> float:
    """Probability that chance makes this sensor's mean square as large beside that of the others."""
    rest, others = pool_degrees - own_degrees, float(pool[0, 0] - own[0, 0])
    if own_degrees < 1 or rest < 1 or others <= 0:
        return 1.0
    return float(special.fdtrc(own_degrees, rest, float(own[0, 0]) / own_degrees / (others / rest)))


def _branch_line(
    used: UsedReadings,
    branch: str,
    fit: _RunFits,
    pool: _Pool,
    reference: ReferenceQuantity,
    description: Description,
) -> BranchLine:
    """The sensor's line from its runs, with all that a reading by it needs."""
    spread, source = _spread_of(fit, pool)
    known = source != UNKNOWN
    combined = (
        line_of_mountings(fit.coefficients, fit.within, fit.mounting, spread, fit.centre)
        if known
        else line_of_runs(fit.coefficients, fit.within, np.zeros((2, 2)), fit.centre)
    )
    coefficients, covariance, run_covariance = combined.raw
    slope = float(coefficients[1])
    fit_covariance = covariance if known else np.full((2, 2), np.nan)
    rows = fit.rows
    shared = shared_covariance(used, rows, reference.name, used.x[rows], slope, description)
    cells = level_cells(used, rows, slope)
    hysteresis = _hysteresis(cells, fit) if branch == "both" else None
    full_scale_output, full_scale = _full_scale(fit.span, slope, reference, description)
    line = BranchLine(
        used.text("generation", int(rows[0])),
        used.text("module", int(rows[0])),
        used.text("sensor", int(rows[0])),
        used.text("position", int(rows[0])),
        branch,
        used.text("unit", int(rows[0])),
        rows,
        cells,
        fit.run_codes,
        fit.lines,
        float(coefficients[0]),
        slope,
        fit_covariance + shared,
        fit_covariance,
        float(combined.covariance[0, 0]) if known else float("nan"),
        run_covariance if known else np.full((2, 2), np.nan),
        at_zero(spread.mounting, fit.centre),
        spread.mountings,
        shared,
        fit.residual_sd,
        fit.noise,
        fit.noise_degrees,
        fit.lack.variance if fit.lack is not None else 0.0,
        fit.lack,
        hysteresis,
        0.5 * float(np.sqrt(hysteresis.mean_square_width)) if hysteresis is not None else 0.0,
        spread.degrees_of_freedom,
        float("nan"),
        source,
        full_scale_output,
        full_scale,
    )
    degrees = effective_degrees(line, fit.centre, line.covariance, line.run_covariance)
    return replace(line, effective_degrees=degrees)


def effective_degrees(
    line: BranchLine, x: float, covariance: FloatArray, run_covariance: FloatArray
) -> float:
    """Return the Welch–Satterthwaite degrees of freedom at *x* of all terms that averaging readings leaves.

    ``covariance`` and ``run_covariance`` are those of the line in the units of *x*, reference uncertainty
    (of no limited degrees of freedom) included. NaN where nothing is known of runs.
    """
    place = np.array([1.0, x])
    of_reference = float(place @ covariance @ place) - line.fit_variance
    of_runs = line.fit_variance + float(place @ run_covariance @ place)
    lack = line.lack_of_fit_variance
    total = of_runs + of_reference + lack + line.direction_half_width**2
    spent = of_runs**2 / line.degrees_of_freedom
    if line.lack_of_fit is not None:
        spent += lack**2 / line.lack_of_fit.first_degrees
    return float(total**2 / spent) if spent > 0 else line.degrees_of_freedom


def _hysteresis(cells: LevelCells, fit: _RunFits) -> StepHysteresis | None:
    """Rising minus falling at each level that both branches visit in a run."""
    levels, differences = cells.differences()
    if len(levels) == 0:
        return None
    return step_hysteresis(differences, noise_variance=2.0 * fit.noise, noise_degrees=fit.noise_degrees)


def _full_scale(
    span: tuple[float, float], slope: float, reference: ReferenceQuantity, description: Description
) -> tuple[float, str]:
    """Full-scale output: over the rated range where it was reached, else over the range measured."""
    low, high = span
    rated = description.range_strain if reference.name == "strain" else description.range_elongation_mm
    reach = high if reference.name != "length" else high - low
    if rated > 0 and reach >= REACHED_SHARE * rated:
        return abs(slope) * rated, "rated"
    return abs(slope) * (high - low), "measured"
