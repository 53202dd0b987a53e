"""A signal that an influence moves: y = a + b ε + c p + d ε p, with sweeps of the influence as the evidence.

A sweep is the influence run up and down at one kept length. Each has a level and a slope of its own, taken
over both branches of its loop; the slopes of several sweeps then say c (the slope at zero strain), d (its
change per unit strain) and how well both are known. Samples of one sweep are no independent evidence of
either: only where there is a single sweep do they carry the interval, by their autocorrelation, and then the
result says so. Here ε stands for any reference (strain, elongation, length) and p for any influence.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from campaign.methods.autocorrelation import stretch_means

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

OWN_FROM = 10
"""Degrees of freedom from which a sensor's own scatter carries its interval; below that it is pooled."""

FAR_RISK = 0.01
"""Risk, over all sensors, of keeping a sensor's own scatter because it seems larger than the others'."""

RUNS = "this sensor's runs"
SWEEPS = "this sensor's sweeps"
POOLED = "pooled over sensors"
WITHIN = "within the sweeps only: run-to-run error unknown"
UNKNOWN = "run-to-run error unknown"
"""Where the covariance of a fit was taken from."""


@dataclass(frozen=True)
class SweepLines:
    """One straight line of signal against influence a sweep, over both branches.

    Attributes
    ----------
    level, slope
        Shape (sweeps,): signal where the influence is zero, and its change per unit of the influence.
    slope_error, slope_freedom
        Standard error of the slope by the autocorrelation about the line, and the degrees of freedom left.
    loop
        Rising minus falling signal at mid range; NaN where the sweep has one branch only.
    residual_sd
        Standard deviation about the line.
    time_correlation
        Correlation of influence and time; NaN without time. Near ±1 any drift is part of the slope.
    drift, drift_p
        Change of the signal per second beside the influence, and its p; NaN where not identifiable.
    """

    level: FloatArray
    slope: FloatArray
    slope_error: FloatArray
    slope_freedom: FloatArray
    loop: FloatArray
    residual_sd: FloatArray
    time_correlation: FloatArray
    drift: FloatArray
    drift_p: FloatArray


@dataclass(frozen=True)
class SweepSet:
    """The sweeps of one sensor: shape (sweeps,) each.

    Attributes
    ----------
    x
        Kept reference value of each sweep; NaN where not known.
    slope, slope_error, slope_freedom
        As in :class:`SweepLines`.
    run
        Which run of the stand the sweep belongs to.
    """

    x: FloatArray
    slope: FloatArray
    slope_error: FloatArray
    slope_freedom: FloatArray
    run: IntArray


@dataclass(frozen=True)
class InfluenceFit:
    """How an influence moves the signal of one sensor.

    Attributes
    ----------
    coefficients
        (2,): c at zero of the reference and d per unit of it; d is NaN with one length only, and c is then
        the slope at that length.
    covariance
        (2, 2), NaN where unknown.
    degrees_of_freedom
        Behind the covariance; 0 where it is unknown.
    source
        Where the covariance was taken from.
    runs, sweeps, lengths
        Counts.
    """

    coefficients: FloatArray
    covariance: FloatArray
    degrees_of_freedom: float
    source: str
    runs: int
    sweeps: int
    lengths: int

    @property
    def has_change(self) -> bool:
        """Whether d, the change per unit of the reference, could be told."""
        return bool(np.isfinite(self.coefficients[1]))

    def at(self, x: float) -> tuple[float, float]:
        """Return the slope at reference value *x* and its variance (NaN where unknown)."""
        if not self.has_change:
            return float(self.coefficients[0]), float(self.covariance[0, 0])
        direction = np.array([1.0, x])
        return float(direction @ self.coefficients), float(direction @ self.covariance @ direction)


def sweep_lines(
    influence: FloatArray,
    signal: FloatArray,
    counts: IntArray,
    branch: IntArray,
    time_s: FloatArray,
) -> SweepLines:
    """Fit one line a sweep.

    Parameters
    ----------
    influence, signal, time_s
        Shape (points,), the points of all sweeps one after another in the order taken; time may be NaN.
    counts
        Shape (sweeps,): points of each sweep, at least 3.
    branch
        Shape (points,): 1 rising, −1 falling, 0 neither.

    Returns
    -------
    SweepLines
        The slope's standard error respects the autocorrelation of the residuals
        (:func:`campaign.methods.autocorrelation.stretch_means` with the influence in place of time).
    """
    scale = float(np.ptp(signal)) or 1.0  # squares of residuals must neither vanish nor overflow
    means = stretch_means((signal - signal[0]) / scale, influence, counts)
    slope = means.slopes * scale
    codes = np.repeat(np.arange(len(counts)), counts)
    level = (np.bincount(codes, signal) - slope * np.bincount(codes, influence)) / counts
    residual = (signal - level[codes] - slope[codes] * influence) / scale
    parts = np.split(np.arange(len(signal)), np.cumsum(counts)[:-1])
    drift, drift_p, correlation = _drifts(influence, residual, time_s, counts, parts)
    return SweepLines(
        level,
        slope,
        means.slope_standard_errors * scale,
        means.slope_degrees_of_freedom,
        np.array([loop_width(influence[part], signal[part], branch[part]) for part in parts]),
        np.sqrt(np.bincount(codes, residual**2) / np.maximum(counts - 2, 1)) * scale,
        correlation,
        drift * scale,
        drift_p,
    )


def loop_width(influence: FloatArray, signal: FloatArray, branch: IntArray) -> float:
    """Return rising minus falling signal at the middle of the influence's range, by interpolation.

    Arrays have shape (points,), *branch* 1 rising and −1 falling. NaN where a branch does not reach the
    middle.
    """
    middle = (influence.min() + influence.max()) / 2.0
    sides = []
    for sign in (1, -1):
        own = np.flatnonzero(branch == sign)
        if len(own) < 2 or not influence[own].min() <= middle <= influence[own].max():
            return float("nan")
        order = own[np.argsort(influence[own], kind="stable")]
        sides.append(float(np.interp(middle, influence[order], signal[order])))
    return sides[0] - sides[1]


def _drifts(
    influence: FloatArray, residual: FloatArray, time_s: FloatArray, counts: IntArray, parts: list[IntArray]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Drift per second beside the influence, its p, and the correlation of influence and time, a sweep."""
    nan = np.full(len(parts), np.nan)
    if not np.isfinite(time_s).all():
        return nan, nan.copy(), nan.copy()
    rest = np.empty_like(time_s)
    correlation = nan.copy()
    for number, part in enumerate(parts):
        design = np.column_stack([np.ones(len(part)), influence[part] - influence[part].mean()])
        centred = time_s[part] - time_s[part].mean()
        rest[part] = centred - design @ np.linalg.lstsq(design, centred, rcond=None)[0]
        size = float(np.linalg.norm(centred) * np.linalg.norm(design[:, 1]))
        correlation[number] = float(centred @ design[:, 1]) / size if size > 0 else np.nan
    told = np.abs(correlation) < 0.999
    found = stretch_means(residual, rest, counts)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.abs(found.slopes / found.slope_standard_errors)
    p = 2.0 * special.stdtr(np.maximum(found.slope_degrees_of_freedom - 1.0, 1.0), -ratio)
    return np.where(told, found.slopes, np.nan), np.where(told, p, np.nan), correlation


# --- from sweeps to coefficients


@dataclass(frozen=True)
class _Scatter:
    """Estimate of one sensor and the mean square of its units (runs or sweeps) about it."""

    theta: FloatArray
    unscaled: FloatArray
    matrix: FloatArray
    freedom: int
    by_runs: bool

    @property
    def kind(self) -> tuple[bool, int]:
        return self.by_runs, len(self.theta)

    @property
    def size(self) -> float:
        return float(np.trace(self.matrix))


def fit_influences(sensors: Sequence[SweepSet]) -> tuple[InfluenceFit, ...]:
    """Fit c and d of sensors that were swept alike; scatter is pooled over them where each has little.

    Parameters
    ----------
    sensors
        The sweeps of each sensor of one generation.

    Returns
    -------
    tuple of InfluenceFit
        Where every run holds two or more lengths, and there are two or more runs, c and d are the means of
        the runs' own values and their covariance is that between runs; else every sweep counts as one
        observation. Below :data:`OWN_FROM` degrees of freedom the mean square is pooled over the sensors,
        unless the sensor's own is larger than chance allows. One sweep alone: the interval from within it.

    Notes
    -----
    Mean of unit-wise estimates: P. A. V. B. Swamy, Econometrica 38 (1970) 311–323.
    """
    scatters = [_scatter(sensor) for sensor in sensors]
    return tuple(
        _fit_of(sensor, scatter, [s for s in scatters if s.kind == scatter.kind], len(sensors))
        for sensor, scatter in zip(sensors, scatters, strict=True)
    )


def distinct_lengths(x: FloatArray) -> int:
    """Return how many kept lengths there are among *x*, 2 % of their span counting as one; NaN is one."""
    known = np.sort(x[np.isfinite(x)])
    if len(known) == 0 or len(known) < len(x):
        return 1
    span = known[-1] - known[0]
    if span <= 1e-9 * max(abs(known[-1]), abs(known[0]), 1e-12):
        return 1
    return 1 + int(np.sum(np.diff(known) > 0.02 * span))


def design_of(x: FloatArray, columns: int) -> FloatArray:
    """Return the columns of the slope's line: ones, and *x* where there are two."""
    return np.column_stack([np.ones(len(x)), x]) if columns == 2 else np.ones((len(x), 1))


def _scatter(sensor: SweepSet) -> _Scatter:
    columns = 2 if distinct_lengths(sensor.x) > 1 else 1
    runs = [np.flatnonzero(sensor.run == run) for run in np.unique(sensor.run)]
    lengths = [distinct_lengths(sensor.x[rows]) for rows in runs]
    if len(runs) > 1 and columns == 2 and min(lengths) > 1:
        each = np.array([_least_squares(design_of(sensor.x[r], columns), sensor.slope[r])[0] for r in runs])
        about = each - each.mean(axis=0)
        matrix = about.T @ about / (len(runs) - 1)
        return _Scatter(each.mean(axis=0), np.array([[1.0 / len(runs)]]), matrix, len(runs) - 1, True)
    if columns == 1 and len(runs) > 1:
        means = np.array([sensor.slope[rows].mean() for rows in runs])
        matrix = np.array([[float(means.var(ddof=1))]])
        return _Scatter(np.array([means.mean()]), np.array([[1.0 / len(runs)]]), matrix, len(runs) - 1, True)
    design = design_of(sensor.x, columns)
    theta, inverse = _least_squares(design, sensor.slope)
    freedom = len(sensor.slope) - columns
    square = float(np.sum((sensor.slope - design @ theta) ** 2)) / freedom if freedom else 0.0
    return _Scatter(theta, inverse, np.array([[square]]), freedom, False)


def _least_squares(design: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    inverse = np.linalg.pinv(design.T @ design)
    return np.asarray(inverse @ design.T @ values), np.asarray(inverse)


def _fit_of(sensor: SweepSet, scatter: _Scatter, alike: Sequence[_Scatter], sensors: int) -> InfluenceFit:
    matrix, freedom, source = _carried_by(sensor, scatter, alike, sensors)
    covariance = np.full((2, 2), np.nan)
    columns = len(scatter.theta)
    if source == WITHIN:
        covariance[:columns, :columns] = _within(sensor, columns)
    elif freedom > 0:
        covariance[:columns, :columns] = (
            matrix * scatter.unscaled[0, 0] if scatter.by_runs else matrix[0, 0] * scatter.unscaled
        )
    theta = np.full(2, np.nan)
    theta[:columns] = scatter.theta
    return InfluenceFit(
        theta,
        covariance,
        freedom,
        source,
        len(np.unique(sensor.run)),
        len(sensor.slope),
        distinct_lengths(sensor.x),
    )


def _carried_by(
    sensor: SweepSet, own: _Scatter, alike: Sequence[_Scatter], sensors: int
) -> tuple[FloatArray, float, str]:
    """Mean square, its degrees of freedom and where it was taken from."""
    name = RUNS if own.by_runs else SWEEPS
    others = [s for s in alike if s is not own and s.freedom > 0]
    rest = sum(s.freedom for s in others)
    if own.freedom >= OWN_FROM or (own.freedom > 0 and (rest == 0 or _is_far(own, others, rest, sensors))):
        return own.matrix, float(own.freedom), name
    freedom = own.freedom + rest
    if freedom > 0:
        pooled = np.sum([s.freedom * s.matrix for s in [own, *others]], axis=0) / freedom
        return np.asarray(pooled), float(freedom), POOLED
    within = float(np.min(sensor.slope_freedom))
    if np.isfinite(sensor.slope_error).all() and within > 0:
        return own.matrix, within, WITHIN
    return own.matrix, 0.0, UNKNOWN


def _is_far(own: _Scatter, others: Sequence[_Scatter], rest: int, sensors: int) -> bool:
    pooled = sum(s.freedom * s.size for s in others) / rest
    if pooled <= 0:
        return own.size > 0
    return bool(special.fdtrc(own.freedom, rest, own.size / pooled) < FAR_RISK / max(sensors, 1))


def _within(sensor: SweepSet, columns: int) -> FloatArray:
    """Covariance of c and d from the standard errors inside the sweeps alone."""
    design = design_of(sensor.x, columns)
    inverse = np.linalg.pinv(design.T @ design) @ design.T
    return np.asarray((inverse * sensor.slope_error**2) @ inverse.T)


# --- compensation


def left_out_slopes(x: FloatArray, slope: FloatArray, run: IntArray) -> tuple[FloatArray, str]:
    """Predict every sweep's slope from sweeps that were not its own.

    Parameters
    ----------
    x, slope, run
        Shape (sweeps,): kept reference value (NaN where not known), slope, and run of each sweep.

    Returns
    -------
    predicted, by
        Shape (sweeps,), and what was left out in turn: ``run`` where there are several, else ``length``;
        NaN and an empty text with one sweep only.
    """
    by = "run" if len(np.unique(run)) > 1 else "length"
    groups = run if by == "run" else np.arange(len(slope))
    predicted = np.full(len(slope), np.nan)
    for group in np.unique(groups):
        inside, outside = groups == group, groups != group
        if not outside.any():
            return predicted, ""
        columns = 2 if distinct_lengths(x[outside]) > 1 and np.isfinite(x[inside]).all() else 1
        theta, _ = _least_squares(design_of(x[outside], columns), slope[outside])
        predicted[inside] = design_of(x[inside], columns) @ theta
    return predicted, by


def spread_about_sweeps(
    influence: FloatArray, signal: FloatArray, sweep: IntArray, slope: FloatArray
) -> float:
    """Return the SD of signals about their sweep's mean once *slope* times the influence is taken off.

    Parameters
    ----------
    influence, signal, sweep
        Shape (points,): values, and the number from 0 of the sweep that each belongs to.
    slope
        Shape (sweeps,): what is taken off, zero for no compensation.

    Returns
    -------
    float
        With points − sweeps degrees of freedom; NaN where a slope is not known or nothing is left.
    """
    freedom = len(signal) - len(slope)
    if freedom < 1 or not np.isfinite(slope).all():
        return float("nan")
    rest = signal - slope[sweep] * influence
    counts = np.bincount(sweep, minlength=len(slope))
    about = rest - (np.bincount(sweep, rest, minlength=len(slope)) / np.maximum(counts, 1))[sweep]
    return float(np.sqrt(np.sum(about**2) / freedom))


def compensate(
    signal: FloatArray, x: FloatArray, influence: FloatArray, fit: InfluenceFit, zero: float = 0.0
) -> FloatArray:
    """Return signals with what the influence adds taken off: y − (c + d ε)(p − zero).

    Arrays have shape (samples,). Where d is not known, c alone is used and *x* plays no part.
    """
    slope = fit.coefficients[0] + (fit.coefficients[1] * x if fit.has_change else 0.0)
    return np.asarray(signal - slope * (influence - zero))


def quotient(
    value: float, variance: float, divisor: float, divisor_variance: float, freedoms: Mapping[str, float]
) -> tuple[float, float, float]:
    """Return value/divisor, its standard uncertainty and effective degrees of freedom.

    Parameters
    ----------
    value, variance, divisor, divisor_variance
        Independent estimates and their variances.
    freedoms
        ``value`` and ``divisor`` → degrees of freedom (infinite allowed).

    Notes
    -----
    First order, GUM 5.1.2; effective degrees of freedom by Welch–Satterthwaite, GUM G.4.1.
    """
    if not divisor:
        return float("nan"), float("nan"), 0.0
    ratio = value / divisor
    parts = {"value": variance / divisor**2, "divisor": ratio**2 * divisor_variance / divisor**2}
    total = sum(parts.values())
    if not total > 0:
        return ratio, float(np.sqrt(total)) if total == 0 else float("nan"), freedoms["value"]
    spent = sum(part**2 / freedoms[name] for name, part in parts.items() if freedoms[name] > 0 and part > 0)
    return ratio, float(np.sqrt(total)), total**2 / spent if spent > 0 else float("inf")
