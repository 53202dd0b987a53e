"""Lines of runs and of sensors, branch by branch; run-to-run covariance pooled where runs are few."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import special

from campaign.methods.calibration_line import (
    GroupLines,
    LackOfFit,
    fit_lines,
    lack_of_fit_of_runs,
    line_of_runs,
    pooled_lack_of_fit,
    run_covariance,
    scatter_of_runs,
)
from campaign.methods.reference_uncertainty import covariance_of_line, shared_sources
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

DIRECTION_SIGNS = {"rising": 1.0, "falling": -1.0, "turning": 0.0}

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
        Index labels of its readings in the table of used readings.
    run_codes, run_lines
        Codes of the runs in that table, and their own lines, in the same order.
    intercept, slope
        The line.
    covariance, run_covariance
        Shape (2, 2): of (intercept, slope), reference uncertainty included, and of a new run's line about
        it; NaN with one run and nothing to pool with.
    fit_covariance
        Shape (2, 2): ``covariance`` before the uncertainty of the reference is added.
    residual_sd
        SD within runs about the runs' own lines.
    residual_variance, lack_of_fit_variance
        Noise of one reading about its run, without and of lack of fit.
    lack_of_fit
        The test of level against level × run within directions; None where it cannot be made.
    hysteresis
        Differences of branches at common levels; None with one branch.
    direction_half_width
        Half the root-mean-square loop width for both branches, else 0.
    degrees_of_freedom, effective_degrees
        Between runs; and of everything that averaging does not reduce, at mid range.
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
    rows: pd.Index
    run_codes: IntArray
    run_lines: GroupLines
    intercept: float
    slope: float
    covariance: FloatArray
    fit_covariance: FloatArray
    run_covariance: FloatArray
    residual_sd: float
    residual_variance: float
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

    rows: pd.DataFrame
    span: tuple[float, float]
    run_codes: IntArray
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


@dataclass(frozen=True)
class _Pool:
    """Scatter of runs over the sensors of one generation and branch, in the basis of each sensor's mean x."""

    covariance: FloatArray
    degrees: int
    sensors: int


def branch_lines(
    used: pd.DataFrame, reference: ReferenceQuantity, description: Description
) -> tuple[BranchLine, ...]:
    """Return the lines of all sensors, sorted; for each sensor both branches, rising, falling."""
    fits: dict[tuple[str, str, str, str], _RunFits] = {}
    for key, rows in used.groupby(SENSOR_KEYS, sort=True):
        generation, module, sensor = map(str, key)
        span = float(rows["x"].min()), float(rows["x"].max())
        for branch, part in _branches(rows).items():
            fit = _fit_runs(part, branch, span)
            if fit is not None:
                fits[generation, module, sensor, branch] = fit
    pools = _pools(fits)
    return tuple(
        _branch_line(key, fit, pools[key[0], key[3]], reference, description) for key, fit in fits.items()
    )


def line_of_sensor(lines: tuple[BranchLine, ...]) -> dict[tuple[str, str, str], BranchLine]:
    """Return the line that stands for each sensor: both branches, else the only one that was run."""
    chosen: dict[tuple[str, str, str], BranchLine] = {}
    for line in lines:
        chosen.setdefault(line.key, line)
    return chosen


def run_lines_frame(used: pd.DataFrame, lines: tuple[BranchLine, ...]) -> pd.DataFrame:
    """Return one row a run and branch; columns as in ``Calibration.run_lines``."""
    first = used.drop_duplicates("run").set_index("run")
    returns = {
        code: zero_return(rows["x"].to_numpy(float), rows["signal"].to_numpy(float))
        for code, rows in used.sort_values("order").groupby("run")
    }
    spans = {branch: _spans(used, branch) for branch in ("both", "rising", "falling")}
    records = [
        {
            **{name: first.at[code, name] for name in [*SENSOR_KEYS, "position", *RUN_KEYS[3:]]},
            "branch": line.branch,
            "intercept": line.run_lines.intercepts[place],
            "slope": line.run_lines.slopes[place],
            "residual_sd": _residual_sd(line.run_lines, place),
            "readings": int(line.run_lines.counts[place]),
            "x_low": spans[line.branch].at[code, "min"],
            "x_high": spans[line.branch].at[code, "max"],
            "zero_return": returns[code],
            "zero_return_percent_fso": 100.0 * returns[code] / line.full_scale_output,
        }
        for line in lines
        for place, code in enumerate(line.run_codes)
    ]
    columns = [*SENSOR_KEYS, "position", *RUN_KEYS[3:], "branch", "intercept", "slope", "residual_sd"]
    columns += ["readings", "x_low", "x_high", "zero_return", "zero_return_percent_fso"]
    return pd.DataFrame(records, columns=columns)


def _spans(used: pd.DataFrame, branch: str) -> pd.DataFrame:
    """Lowest and highest x of each run's readings in the branch, indexed by run code."""
    rows = used if branch == "both" else used[used["direction"] == branch]
    return rows.groupby("run")["x"].agg(["min", "max"])


def _residual_sd(lines: GroupLines, place: int) -> float:
    degrees = int(lines.counts[place]) - 2
    return float(np.sqrt(lines.residual_sums_of_squares[place] / degrees)) if degrees > 0 else float("nan")


def _branches(rows: pd.DataFrame) -> dict[str, pd.DataFrame]:
    """Readings by branch, the one that stands for the sensor first: both, unless all are of one."""
    parts = {branch: rows[rows["direction"] == branch] for branch in ("rising", "falling")}
    whole = {branch: part for branch, part in parts.items() if len(part) == len(rows)}
    return whole or {"both": rows, **parts}


def _fit_runs(rows: pd.DataFrame, branch: str, span: tuple[float, float]) -> _RunFits | None:
    """Lines of the runs of one sensor and branch; None where no run has enough levels for one."""
    if rows.empty:
        return None
    fewest = 2 if branch == "both" else 3
    held = rows.groupby("run")["x"].transform("size") >= fewest
    spread = rows.groupby("run")["x"].transform(lambda x: x.max() - x.min()) > 0
    rows = rows[held & spread]
    if rows.empty:
        return None
    codes, run = np.unique(rows["run"].to_numpy(), return_inverse=True)
    x, y = rows["x"].to_numpy(float), rows["signal"].to_numpy(float)
    lines = fit_lines(x, y, run, len(codes))
    degrees = float(np.sum(lines.counts - 2))
    own = float(np.sum(lines.residual_sums_of_squares)) / degrees if degrees > 0 else float("nan")
    lack = _lack_of_fit(rows, x, y, run)
    noise, noise_degrees = _noise(rows, x, y, run, lack, own, degrees)
    centre = float(x.mean())
    within = noise * np.stack([_inverse_design(lines, place, centre) for place in range(len(codes))])
    coefficients = np.column_stack([lines.values(centre), lines.slopes])
    return _RunFits(
        rows,
        span,
        codes,
        lines,
        centre,
        coefficients,
        within,
        noise,
        noise_degrees,
        lack,
        float(np.sqrt(own)),
    )


def _inverse_design(lines: GroupLines, place: int, centre: float) -> FloatArray:
    """(X'X)⁻¹ of one run for (value at *centre*, slope)."""
    count, sxx = float(lines.counts[place]), float(lines.x_sums_of_squares[place])
    gap = centre - float(lines.x_means[place])
    return np.array([[1.0 / count + gap**2 / sxx, gap / sxx], [gap / sxx, 1.0 / sxx]])


def _direction_codes(rows: pd.DataFrame) -> IntArray:
    """Branch of every reading, −1 for turning; all one where most turn (levels in random order)."""
    direction = rows["direction"].to_numpy()
    codes = np.select([direction == "rising", direction == "falling"], [0, 1], -1)
    return np.zeros(len(rows), dtype=np.int64) if np.mean(codes == -1) > 0.5 else codes.astype(np.int64)


def _lack_of_fit(rows: pd.DataFrame, x: FloatArray, y: FloatArray, run: IntArray) -> LackOfFit | None:
    """Level against level × run within directions, each run and direction with its own line."""
    direction = _direction_codes(rows)
    level = rows["level"].to_numpy(float)
    parts = []
    for code in (0, 1):
        chosen = (direction == code) & np.isfinite(level)
        if not chosen.any():
            continue
        runs, own_run = np.unique(run[chosen], return_inverse=True)
        lines = fit_lines(x[chosen], y[chosen], own_run, len(runs))
        kept = np.isfinite(lines.slopes)[own_run]
        dx = x[chosen] - lines.x_means[own_run]
        residual = y[chosen] - lines.y_means[own_run] - lines.slopes[own_run] * dx
        codes = np.unique(level[chosen][kept], return_inverse=True)[1]
        part = lack_of_fit_of_runs(residual[kept], own_run[kept], codes)
        parts += [part] if part is not None else []
    return pooled_lack_of_fit(parts, float(len(np.unique(run))))


def _noise(
    rows: pd.DataFrame,
    x: FloatArray,
    y: FloatArray,
    run: IntArray,
    lack: LackOfFit | None,
    own: float,
    own_degrees: float,
) -> tuple[float, float]:
    """Variance of a reading about its run, by level × run or else about branch lines; its degrees."""
    if lack is not None and lack.mean_square_error > 0:
        return lack.mean_square_error, float(lack.second_degrees)
    direction = _direction_codes(rows)
    kept = direction >= 0
    codes, group = np.unique(run[kept] * 2 + direction[kept], return_inverse=True)
    lines = fit_lines(x[kept], y[kept], group, len(codes))
    fitted = np.isfinite(lines.slopes)
    degrees = float(np.sum((lines.counts - 2)[fitted]))
    if degrees > 0:
        return max(float(np.sum(lines.residual_sums_of_squares[fitted])) / degrees, _smallest(y)), degrees
    return (own, own_degrees) if own_degrees > 0 and own > 0 else (_smallest(y), 1.0)


def _smallest(y: FloatArray) -> float:
    """A variance at the level of rounding, so that exact data do not divide by zero."""
    return float((1e-12 * max(float(np.max(np.abs(y))), 1e-300)) ** 2)


def _pools(fits: dict[tuple[str, str, str, str], _RunFits]) -> dict[tuple[str, str], _Pool]:
    """Observed scatter of runs, less noise within, pooled over sensors, by generation and branch."""
    gathered: dict[tuple[str, str], list[_RunFits]] = {}
    for key, fit in fits.items():
        gathered.setdefault((key[0], key[3]), []).append(fit)
    pools = {}
    for name, members in gathered.items():
        several = [fit for fit in members if fit.degrees > 0]
        degrees = sum(fit.degrees for fit in several)
        covariance = np.full((2, 2), np.nan)
        if degrees:
            observed = np.sum([scatter_of_runs(fit.coefficients) for fit in several], axis=0)
            within = np.sum([fit.degrees * fit.within.mean(axis=0) for fit in several], axis=0)
            covariance = run_covariance(observed / degrees, within / degrees)
        pools[name] = _Pool(covariance, degrees, len(several))
    return pools


def _run_covariance_of(fit: _RunFits, pool: _Pool) -> tuple[FloatArray, float, str]:
    """Covariance of true run lines for one sensor, its degrees of freedom and where it is from."""
    if fit.degrees == 0:
        return np.full((2, 2), np.nan), float("nan"), UNKNOWN
    observed = scatter_of_runs(fit.coefficients) / fit.degrees
    own = run_covariance(observed, fit.within.mean(axis=0))
    if fit.degrees >= ENOUGH_OWN_DEGREES or pool.sensors < 2 or _scatters_more(fit, observed, pool):
        return own, float(fit.degrees), OWN_RUNS
    return pool.covariance, float(pool.degrees), POOLED


def _scatters_more(fit: _RunFits, observed: FloatArray, pool: _Pool) -> bool:
    """Whether this sensor's runs scatter more at its mean x than the other sensors' do, beyond chance."""
    expected = pool.covariance + fit.within.mean(axis=0)
    total = pool.degrees * expected[0, 0] - fit.degrees * observed[0, 0]
    rest = pool.degrees - fit.degrees
    if rest < 1 or total <= 0:
        return False
    ratio = observed[0, 0] / (total / rest)
    return bool(special.fdtrc(fit.degrees, rest, ratio) < HETEROGENEITY_RISK)


def _branch_line(
    key: tuple[str, str, str, str],
    fit: _RunFits,
    pool: _Pool,
    reference: ReferenceQuantity,
    description: Description,
) -> BranchLine:
    """The sensor's line from its runs, with all that a reading by it needs."""
    between, degrees, source = _run_covariance_of(fit, pool)
    combined = line_of_runs(fit.coefficients, fit.within, np.nan_to_num(between), fit.centre)
    coefficients, covariance, _ = combined.raw
    back = np.array([[1.0, -fit.centre], [0.0, 1.0]])
    slope = float(coefficients[1])
    known = source != UNKNOWN
    fit_covariance = covariance if known else np.full((2, 2), np.nan)
    shared = _shared_covariance(fit.rows, slope, reference, description)
    hysteresis = _hysteresis(fit, slope) if key[3] == "both" else None
    full_scale_output, full_scale = _full_scale(fit.span, slope, reference, description)
    line = BranchLine(
        *key[:3],
        str(fit.rows["position"].iloc[0]),
        key[3],
        str(fit.rows["unit"].iloc[0]),
        fit.rows.index,
        fit.run_codes,
        fit.lines,
        float(coefficients[0]),
        slope,
        fit_covariance + shared,
        fit_covariance,
        back @ between @ back.T,
        fit.residual_sd,
        fit.noise,
        fit.lack.variance if fit.lack is not None else 0.0,
        fit.lack,
        hysteresis,
        0.5 * float(np.sqrt(hysteresis.mean_square_width)) if hysteresis is not None else 0.0,
        degrees,
        float("nan"),
        source,
        full_scale_output,
        full_scale,
    )
    return replace(line, effective_degrees=_effective_degrees(line, fit)) if known else line


def _effective_degrees(line: BranchLine, fit: _RunFits) -> float:
    """Welch–Satterthwaite degrees of freedom, at the mean x, of all terms that averaging readings leaves."""
    place = np.array([1.0, fit.centre])
    of_runs = float(place @ (line.fit_covariance + line.run_covariance) @ place)
    lack = line.lack_of_fit_variance
    total = float(place @ (line.covariance + line.run_covariance) @ place) + lack
    total += line.direction_half_width**2
    spent = of_runs**2 / line.degrees_of_freedom
    if line.lack_of_fit is not None:
        spent += lack**2 / line.lack_of_fit.first_degrees
    return total**2 / spent if spent > 0 else line.degrees_of_freedom


def _hysteresis(fit: _RunFits, slope: float) -> StepHysteresis | None:
    """Rising minus falling at each level that both branches visit in a run."""
    differences = level_differences(fit.rows, slope)
    if differences.empty:
        return None
    return step_hysteresis(
        differences.to_numpy(float), noise_variance=2.0 * fit.noise, noise_degrees=fit.noise_degrees
    )


def level_differences(rows: pd.DataFrame, slope: float) -> pd.DataFrame:
    """Return rising minus falling signals, one row a run and one column a level visited both ways.

    Signals are moved along the line from the x that was reached to the nominal level.
    """
    cells = run_cells(rows, slope)[0].set_index(["direction", "run", "level"])["signal"]
    if not {"rising", "falling"} <= set(cells.index.get_level_values("direction")):
        return pd.DataFrame()
    difference = (cells["rising"] - cells["falling"]).dropna()
    return difference.unstack("level") if len(difference) else pd.DataFrame()


def _shared_covariance(
    rows: pd.DataFrame, slope: float, reference: ReferenceQuantity, description: Description
) -> FloatArray:
    """What the uncertainty of the reference adds to the covariance of intercept and slope."""
    stated = description.length_reference
    x = rows["x"].to_numpy(float)
    rest = float(rows["rest_length_mm"].iloc[0])
    recorded = str(rows["reference"].iloc[0])
    elongation = rows["elongation_mm"].to_numpy(float)
    if reference.name == "strain" and not np.isfinite(elongation).all():
        elongation = x * rest
    length = rows["length_mm"].to_numpy(float)
    travel = length if recorded == "length" else elongation
    if (reference.name == "strain" and not np.isfinite(rest)) or not np.isfinite(travel).all():
        return np.zeros((2, 2))
    sources = shared_sources(
        recorded=recorded,
        x_is_strain=reference.name == "strain",
        length_mm=length,
        elongation_mm=elongation,
        rest_length_mm=rest,
        direction=rows["direction"].map(DIRECTION_SIGNS).to_numpy(np.float64),
        session=np.unique(rows["session"].astype(str), return_inverse=True)[1].astype(np.int64),
        scale_relative=stated.scale_relative,
        zero_mm=stated.zero_mm,
        backlash_mm=stated.backlash_mm,
        rest_length_uncertainty_mm=float(rows["rest_length_uncertainty_mm"].iloc[0]),
    )
    return covariance_of_line(sources, x, slope)


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


def run_cells(rows: pd.DataFrame, slope: float) -> tuple[pd.DataFrame, IntArray]:
    """Return one row a direction, level and run, and the code of its direction and level.

    Signals (column ``signal``) are moved along the line from the x that was reached to the nominal level;
    rows without a common level are left out.
    """
    rows = rows[np.isfinite(rows["level"])]
    moved = rows.assign(signal=rows["signal"] - slope * (rows["x"] - rows["level"]))
    cells = moved.groupby(["direction", "level", "run"], sort=True)["signal"].mean().reset_index()
    codes = cells.groupby(["direction", "level"], sort=True).ngroup()
    return cells, np.asarray(codes, dtype=np.int64)
