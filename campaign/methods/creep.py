"""Forms of slow change at a kept load or length, fitted to means over stretches of time and compared.

    linear                 c₀ + c₁ t
    logarithmic            c₀ + c₁ ln(1 + t/τ)
    power                  c₀ + c₁ tⁿ                     W. N. Findley, J. S. Lai, K. Onaran, Creep and
                                                          Relaxation of Nonlinear Viscoelastic Materials
                                                          (1976), ch. 8
    stretched exponential  c₀ + c₁ (1 − exp(−(t/τ)^β))    R. Kohlrausch, Annalen der Physik 167 (1854) 56–82
    Prony 1, 2, 3          c₀ + Σ cᵢ (1 − exp(−t/τᵢ))     a series of relaxation times

Residuals are whitened by their own autocorrelation (:mod:`campaign.methods.block_noise`), the same for all
forms, and the forms compared by AICc (C. M. Hurvich and C.-L. Tsai, Biometrika 76 (1989) 297–307).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, cast

import numpy as np
import numpy.typing as npt
from scipy import interpolate, stats

from campaign.methods.block_noise import BlockNoise, Stretches, find_block_noise
from campaign.methods.drift_slope import lag_one
from campaign.methods.separable_fit import (
    SeparableFit,
    SeparableModel,
    Whitening,
    fit_separable,
    inverse_of_squares,
    solved,
)

FloatArray = npt.NDArray[np.float64]

WITHIN_UNITS = 2.0
"""Forms whose AICc is within this of the least are all shown (Burnham and Anderson, 2002, 2.6)."""

EXTRAPOLATION_LIMIT = 10.0
"""No value is given beyond this multiple of the time that the record covers: one decade."""

LONGEST_TIME = 3.0
"""No time constant is looked for beyond this multiple of the time that the record covers."""

SAME_TIME = 1.5
"""Two time constants of a series closer than this ratio are one: such a series is left out."""

FEWEST_STRETCHES = 12
"""A form is fitted only where there are this many means, and at least three a parameter."""

NEVER_SETTLES = ("linear", "logarithmic", "power")
"""Forms without a final value: they have a change in the next decade, not a settling time."""


@dataclass(frozen=True)
class ShapeRange:
    """Where a shape parameter is looked for.

    Attributes
    ----------
    steps
        Values tried first, in equal ratios.
    low, high
        Bounds. Of a time they are multiples of the shortest and of the longest time after the ramp; of an
        exponent they are the bounds themselves.
    is_time
        Which of the two.
    """

    steps: int
    low: float
    high: float
    is_time: bool

    def bounds(self, shortest_s: float, longest_s: float) -> tuple[float, float]:
        """Return the bounds for a record between two times after the ramp."""
        if not self.is_time:
            return self.low, self.high
        return self.low * shortest_s, self.high * max(longest_s, 4.0 * shortest_s)

    def scan(self, shortest_s: float, longest_s: float) -> FloatArray:
        """Return the values tried first, (steps,), inside the bounds."""
        low, high = self.bounds(shortest_s, longest_s)
        return np.geomspace(low * 1.5, high / 1.5, self.steps)


@dataclass(frozen=True)
class CreepForm:
    """One family of curves of time after the end of the ramp (s).

    Attributes
    ----------
    name
        As in the table above.
    shape_names
        Names of the shape parameters in order; times in s.
    model
        The curves.
    ranges
        For each shape parameter where it is looked for: relative to the times of the record, or as they are.
    """

    name: str
    shape_names: tuple[str, ...]
    model: SeparableModel
    ranges: tuple[ShapeRange, ...]

    @property
    def parameters(self) -> int:
        """Number of parameters of the curve."""
        return self.model.shapes + 1 + (self.model.shapes if self.name.startswith("Prony") else 1)


@dataclass(frozen=True)
class FittedForm:
    """One form fitted to one hold.

    Attributes
    ----------
    form
        Which.
    fit
        Coefficients, shapes and their covariance.
    aicc
        Corrected Akaike criterion of the whitened residuals; smaller is better.
    shortest_s, longest_s
        Times between which it was fitted.
    """

    form: CreepForm
    fit: SeparableFit
    aicc: float
    shortest_s: float
    longest_s: float

    @property
    def name(self) -> str:
        """Name of the form."""
        return self.form.name

    def curve(self, times_s: FloatArray) -> FloatArray:
        """Return the curve, NaN beyond :data:`EXTRAPOLATION_LIMIT` times the record."""
        values = self.form.model.basis(times_s, self.fit.shape) @ self.fit.coefficients
        return np.asarray(np.where(times_s <= EXTRAPOLATION_LIMIT * self.longest_s, values, np.nan))

    def standard_errors(self, times_s: FloatArray) -> FloatArray:
        """Return the standard error of the curve, first order (GUM 5.2.2); NaN where beyond the limit."""
        return np.asarray(np.sqrt(self._variances(self._gradient(times_s), times_s)))

    def change(self, first_s: float, last_s: float) -> tuple[float, float]:
        """Return the change of the curve from *first_s* to *last_s* and its standard error."""
        times = np.array([first_s, last_s])
        values = self.curve(times)
        gradient = np.diff(self._gradient(times), axis=0)
        variance = self._variances(gradient, times[1:])
        return float(values[1] - values[0]), float(np.sqrt(variance[0]))

    def final_value(self) -> float:
        """Return what the curve settles to; NaN for a form that never settles or a time on its bound."""
        if self.name in NEVER_SETTLES or self.fit.on_bound.any():
            return float("nan")
        return float(self.fit.coefficients.sum())

    def settling_time(self, band: float) -> float:
        """Return the time (s) from which the curve stays within ±*band* of its final value.

        NaN where it has none, or where it lies beyond :data:`EXTRAPOLATION_LIMIT` times the record; 0 where
        the curve is within the band all along. *band* is in the unit of the signal.
        """
        final = self.final_value()
        if not np.isfinite(final):
            return float("nan")
        grid = np.geomspace(self.shortest_s, EXTRAPOLATION_LIMIT * self.longest_s, 2000)
        outside = np.flatnonzero(np.abs(self.curve(grid) - final) > band)
        if len(outside) == 0:
            return 0.0
        return float(grid[outside[-1] + 1]) if outside[-1] + 1 < len(grid) else float("nan")

    def shape_interval(self, place: int, level: float = 0.95) -> tuple[float, float, float]:
        """Return a shape parameter with its interval, symmetric in its logarithm; limits NaN on a bound."""
        value = float(self.fit.shape[place])
        error = float(self.fit.standard_errors[len(self.fit.coefficients) + place]) / value
        reach = float(stats.t.ppf((1 + level) / 2, max(self.fit.degrees_of_freedom, 1))) * error
        return value, value * float(np.exp(-min(reach, 700.0))), value * float(np.exp(min(reach, 700.0)))

    def _gradient(self, times_s: FloatArray) -> FloatArray:
        basis = self.form.model.basis(times_s, self.fit.shape)
        if not len(self.fit.shape):
            return basis
        slopes = self.form.model.derivatives(times_s, self.fit.shape) @ self.fit.coefficients
        return np.hstack([basis, slopes.T])

    def _variances(self, gradient: FloatArray, times_s: FloatArray) -> FloatArray:
        known = np.isfinite(np.diag(self.fit.covariance))
        covariance = np.where(np.isfinite(self.fit.covariance), self.fit.covariance, 0.0)
        found = np.einsum(
            "ij,jk,ik->i", gradient[:, known], covariance[np.ix_(known, known)], gradient[:, known]
        )
        supported = times_s <= EXTRAPOLATION_LIMIT * self.longest_s
        return np.asarray(np.where(supported & known.any(), np.maximum(found, 0.0), np.nan))


@dataclass(frozen=True)
class CreepFits:
    """All forms that could be fitted to one hold.

    Attributes
    ----------
    fits
        Best first.
    noise
        White and slow noise about the curve.
    lag_one
        Lag-1 autocorrelation of the best form's residuals before whitening, from one mean to the next.
    """

    fits: tuple[FittedForm, ...]
    noise: BlockNoise
    lag_one: float

    @property
    def best(self) -> FittedForm:
        """The form with the least AICc."""
        return self.fits[0]

    @property
    def shown(self) -> tuple[FittedForm, ...]:
        """The forms within :data:`WITHIN_UNITS` of the best, best first."""
        return tuple(f for f in self.fits if f.aicc - self.best.aicc <= WITHIN_UNITS)


def fit_creep(stretches: Stretches, values: FloatArray) -> CreepFits | None:
    """Fit every form to the means of one hold.

    Parameters
    ----------
    stretches
        When the means were taken, s after the end of the ramp; rising, above 0.
    values
        Shape (stretches,): means, unit of the signal.

    Returns
    -------
    CreepFits or None
        ``None`` for fewer than :data:`FEWEST_STRETCHES` means or a signal that never changes. Forms with more
        than a third as many parameters as there are means are left out.
    """
    if len(values) < FEWEST_STRETCHES or np.ptp(values) == 0.0:
        return None
    times = middle_times(stretches)
    noise = find_block_noise(smooth_columns(times), values, stretches)
    whiten = whitened_by(noise.whitening(stretches))
    fitted = (_fitted(form, times, values, whiten) for form in FORMS if 3 * form.parameters <= len(values))
    fits = sorted((found for found in fitted if not _is_degenerate(found)), key=lambda found: found.aicc)
    return CreepFits(tuple(fits), noise, lag_one(values - fits[0].curve(times)))


def bare_fits(fits: CreepFits | None) -> tuple[object, ...]:
    """Return *fits* as numbers and names, without the functions of the forms; empty for ``None``."""
    if fits is None:
        return ()
    forms = tuple((f.name, f.fit, f.aicc, f.shortest_s, f.longest_s) for f in fits.fits)
    return forms, fits.noise, fits.lag_one


def fits_from_bare(bare: tuple[object, ...]) -> CreepFits | None:
    """Return the fits that :func:`bare_fits` wrote down."""
    if not bare:
        return None
    forms, noise, of_best = cast(tuple[Any, BlockNoise, float], bare)
    by_name = {form.name: form for form in FORMS}
    fitted = tuple(FittedForm(by_name[name], *numbers) for name, *numbers in forms)
    return CreepFits(fitted, noise, of_best)


def slope_per_decade(
    stretches: Stretches, values: FloatArray, noise: BlockNoise, shift_s: float = 0.0
) -> tuple[float, float, int]:
    """Return the slope of the means against log₁₀ t, its standard error and degrees of freedom.

    Parameters
    ----------
    stretches, values, noise
        As for :func:`fit_creep`, and the noise that it found.
    shift_s
        Added to all times: the ramp's duration takes t = 0 from its end to its beginning.

    Returns
    -------
    tuple
        Generalised least squares; where the means lie further from the line than their noise explains, the
        error grows by the ratio (R. T. Birge, Physical Review 40 (1932) 207–227). NaN, NaN, 0 for fewer than
        five means.
    """
    if len(values) < 5:
        return float("nan"), float("nan"), 0
    whiten = noise.whitening(stretches)
    columns = np.column_stack([np.ones(len(values)), np.log10(middle_times(stretches) + shift_s)])
    basis, answer = whiten @ columns, whiten @ values
    coefficients = solved(basis, answer)
    freedom = len(values) - 2
    excess = max(float(np.sum((answer - basis @ coefficients) ** 2)) / freedom, 1.0)
    error = float(np.sqrt(inverse_of_squares(basis)[1, 1] * excess))
    return float(coefficients[1]), error, freedom


def middle_times(stretches: Stretches) -> FloatArray:
    """Return the middle of every stretch, s."""
    return np.asarray((stretches.starts_s + stretches.stops_s) / 2.0)


def smooth_columns(times_s: FloatArray) -> FloatArray:
    """Return cubic splines of ln t with two pieces a decade, shape (n, pieces + 3): any form runs along them.

    *times_s* has shape (n,), rising and above 0; there are at most a third as many columns as times.
    """
    logarithms = np.log10(times_s)
    pieces = int(np.clip(np.round(2.0 * np.ptp(logarithms)), 1, max(len(times_s) // 3 - 3, 1)))
    knots = np.quantile(logarithms, np.linspace(0.0, 1.0, pieces + 1))
    padded = np.concatenate([np.repeat(knots[0], 3), knots, np.repeat(knots[-1], 3)])
    return np.asarray(interpolate.BSpline.design_matrix(logarithms, padded, 3).toarray())


def whitened_by(matrix: FloatArray) -> Whitening:
    """Return the whitening that a matrix (n, n) is."""
    return lambda columns: np.asarray(matrix @ columns)


def _fitted(form: CreepForm, times: FloatArray, values: FloatArray, whiten: Whitening) -> FittedForm:
    shortest, longest = float(times[0]), float(times[-1])
    bounds = [found.bounds(shortest, longest) for found in form.ranges]
    fit = fit_separable(
        form.model,
        times,
        values,
        [found.scan(shortest, longest) for found in form.ranges],
        low=[low for low, _ in bounds],
        high=[high for _, high in bounds],
        whiten=whiten,
    )
    return FittedForm(form, fit, _aicc(fit), shortest, longest)


def _is_degenerate(found: FittedForm) -> bool:
    """Whether a series has fewer times than terms: two of them run together, or one lies on a bound."""
    times = np.sort(found.fit.shape)
    if not found.name.startswith("Prony") or len(times) < 2:
        return False
    return bool(found.fit.on_bound.any() or np.min(times[1:] / times[:-1]) < SAME_TIME)


def _aicc(fit: SeparableFit) -> float:
    """AICc = n ln(RSS/n) + 2K + 2K(K + 1)/(n − K − 1), K counting the variance."""
    n = len(fit.residuals)
    k = len(fit.parameters) + 1
    squares = max(fit.residual_sum_of_squares, 1e-300)
    return float(n * np.log(squares / n) + 2 * k + 2 * k * (k + 1) / (n - k - 1))


# --- the forms


def _linear_basis(t: FloatArray, _: FloatArray) -> FloatArray:
    return np.column_stack([np.ones_like(t), t])


def _no_derivatives(t: FloatArray, _: FloatArray) -> FloatArray:
    return np.zeros((0, len(t), 2))


def _logarithmic_basis(t: FloatArray, shape: FloatArray) -> FloatArray:
    return np.column_stack([np.ones_like(t), np.log1p(t / shape[0])])


def _logarithmic_derivatives(t: FloatArray, shape: FloatArray) -> FloatArray:
    return _second_column(-t / (shape[0] * (shape[0] + t)))


def _power_basis(t: FloatArray, shape: FloatArray) -> FloatArray:
    return np.column_stack([np.ones_like(t), t ** shape[0]])


def _power_derivatives(t: FloatArray, shape: FloatArray) -> FloatArray:
    return _second_column(t ** shape[0] * np.log(np.maximum(t, 1e-300)))


def _stretched_basis(t: FloatArray, shape: FloatArray) -> FloatArray:
    return np.column_stack([np.ones_like(t), -np.expm1(-((t / shape[0]) ** shape[1]))])


def _stretched_derivatives(t: FloatArray, shape: FloatArray) -> FloatArray:
    ratio = t / shape[0]
    power = ratio ** shape[1]
    faded = np.exp(-power) * power
    by_time = -faded * shape[1] / shape[0]
    by_exponent = faded * np.log(np.maximum(ratio, 1e-300))
    return np.concatenate([_second_column(by_time), _second_column(by_exponent)])


def _prony_basis(t: FloatArray, shape: FloatArray) -> FloatArray:
    return np.column_stack([np.ones_like(t), -np.expm1(-np.outer(t, 1.0 / shape))])


def _prony_derivatives(t: FloatArray, shape: FloatArray) -> FloatArray:
    made = np.zeros((len(shape), len(t), len(shape) + 1))
    for place, time in enumerate(shape):
        made[place, :, place + 1] = -np.exp(-t / time) * t / time**2
    return made


def _second_column(values: FloatArray) -> FloatArray:
    return np.stack([np.zeros_like(values), values], axis=1)[None]


_TIME = ShapeRange(12, 1.0 / 3.0, LONGEST_TIME, True)


def _prony(terms: int) -> CreepForm:
    model = SeparableModel(_prony_basis, _prony_derivatives, terms, exchangeable=True)
    names = ("τ₁", "τ₂", "τ₃")[:terms]
    return CreepForm(f"Prony {terms}", names, model, (replace(_TIME, steps=10),) * terms)


FORMS: tuple[CreepForm, ...] = (
    CreepForm("linear", (), SeparableModel(_linear_basis, _no_derivatives, 0), ()),
    CreepForm(
        "logarithmic",
        ("τ",),
        SeparableModel(_logarithmic_basis, _logarithmic_derivatives, 1),
        (replace(_TIME, low=0.01),),
    ),
    CreepForm(
        "power",
        ("n",),
        SeparableModel(_power_basis, _power_derivatives, 1),
        (ShapeRange(8, 0.02, 2.0, False),),
    ),
    CreepForm(
        "stretched exponential",
        ("τ", "β"),
        SeparableModel(_stretched_basis, _stretched_derivatives, 2),
        (replace(_TIME, steps=9), ShapeRange(4, 0.1, 1.0, False)),
    ),
    _prony(1),
    _prony(2),
    _prony(3),
)
"""All forms, fewest parameters first."""
