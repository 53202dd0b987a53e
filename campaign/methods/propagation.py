"""The law of propagation of uncertainty for any measurement function (JCGM 100:2008, the GUM).

First order with the covariance of the inputs (5.1.2, 5.2.2), for one output or several (F.1.2, JCGM
102:2011, 6.2); on request the terms of next order for independent inputs (5.1.2, note). What an output's
distribution looks like, and where first order fails, is found by :mod:`campaign.methods.monte_carlo`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
MeasurementFunction = Callable[[FloatArray], FloatArray | float]
"""Inputs, shape (inputs,), to one output or several, shape (outputs,)."""


@dataclass(frozen=True)
class Propagated:
    """Outputs of a measurement function with their covariance.

    Attributes
    ----------
    values
        Shape (outputs,): outputs at the estimates of the inputs.
    covariance
        Shape (outputs, outputs).
    sensitivities
        Shape (outputs, inputs): partial derivatives at the estimates.
    """

    values: FloatArray
    covariance: FloatArray
    sensitivities: FloatArray

    @property
    def standard_uncertainties(self) -> FloatArray:
        """Shape (outputs,)."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def correlations(self) -> FloatArray:
        """Shape (outputs, outputs); NaN where an output has no uncertainty."""
        own = self.standard_uncertainties
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.asarray(self.covariance / np.outer(own, own))


def propagate(
    function: MeasurementFunction,
    estimates: FloatArray,
    covariance: FloatArray,
    sensitivities: FloatArray | None = None,
) -> Propagated:
    """Propagate the covariance of the inputs through *function*, to first order.

    Parameters
    ----------
    function
        The measurement function.
    estimates
        Shape (inputs,).
    covariance
        Shape (inputs, inputs), or standard uncertainties of uncorrelated inputs, shape (inputs,).
    sensitivities
        Shape (outputs, inputs), where they are known; numerical ones otherwise.
    """
    estimates, covariance = np.asarray(estimates, dtype=np.float64), _as_covariance(covariance)
    values = np.atleast_1d(np.asarray(function(estimates), dtype=np.float64))
    if sensitivities is None:
        sensitivities = numerical_sensitivities(function, estimates, np.sqrt(np.diag(covariance)))
    sensitivities = np.atleast_2d(np.asarray(sensitivities, dtype=np.float64))
    return Propagated(values, sensitivities @ covariance @ sensitivities.T, sensitivities)


def covariance_of(standard_uncertainties: FloatArray, correlations: FloatArray) -> FloatArray:
    """Return the covariance from standard uncertainties (n,) and correlations (n, n)."""
    return np.asarray(np.outer(standard_uncertainties, standard_uncertainties) * correlations)


def numerical_sensitivities(
    function: MeasurementFunction, estimates: FloatArray, standard_uncertainties: FloatArray
) -> FloatArray:
    """Return partial derivatives by central differences, extrapolated (Richardson), shape (outputs, inputs).

    Steps are a thousandth of the standard uncertainty, within which first order means to be true; an input
    without uncertainty gets a step by its size.
    """
    estimates = np.asarray(estimates, dtype=np.float64)
    steps = _steps(estimates, standard_uncertainties, 1e-3)
    columns = []
    for number in range(len(estimates)):
        slopes = [_difference(function, estimates, number, steps[number] * part) for part in (1.0, 2.0)]
        columns.append((4.0 * slopes[0] - slopes[1]) / 3.0)
    return np.column_stack(columns)


def second_order_variance(
    function: MeasurementFunction, estimates: FloatArray, standard_uncertainties: FloatArray
) -> float:
    """Return the variance of one output with the terms of next order, for independent symmetric inputs.

    u² = Σ fᵢ² uᵢ² + Σᵢ Σⱼ (½ fᵢⱼ² + fᵢ fᵢⱼⱼ) uᵢ² uⱼ² (GUM 5.1.2, note), derivatives by central
    differences over one standard uncertainty.
    """
    estimates = np.asarray(estimates, dtype=np.float64)
    variances = np.asarray(standard_uncertainties, dtype=np.float64) ** 2
    steps = _steps(estimates, standard_uncertainties, 1.0)

    def slope(at: FloatArray) -> FloatArray:
        return np.array([float(_difference(function, at, k, steps[k])[0]) for k in range(len(at))])

    first = slope(estimates)
    mixed, third = np.empty((2, len(first), len(first)))
    for j, step in enumerate(steps):
        shift = np.zeros_like(estimates)
        shift[j] = step
        above, below = slope(estimates + shift), slope(estimates - shift)
        mixed[:, j] = (above - below) / (2.0 * step)
        third[:, j] = (above - 2.0 * first + below) / step**2
    second = (0.5 * mixed**2 + first[:, None] * third) * np.outer(variances, variances)
    return float(first**2 @ variances + second.sum())


def _as_covariance(covariance: FloatArray) -> FloatArray:
    covariance = np.asarray(covariance, dtype=np.float64)
    return np.diag(covariance**2) if covariance.ndim == 1 else covariance


def _steps(estimates: FloatArray, uncertainties: FloatArray, share: float) -> FloatArray:
    usual = 1e-6 * np.maximum(np.abs(estimates), 1.0)
    return np.where(np.asarray(uncertainties) > 0, share * np.asarray(uncertainties, dtype=np.float64), usual)


def _difference(function: MeasurementFunction, at: FloatArray, number: int, step: float) -> FloatArray:
    shift = np.zeros_like(at)
    shift[number] = step
    rise = np.asarray(function(at + shift), dtype=np.float64) - np.asarray(function(at - shift))
    return np.atleast_1d(rise / (2.0 * step))
