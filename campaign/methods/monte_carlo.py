"""Propagation of distributions by a Monte Carlo method (JCGM 101:2008).

Inputs are drawn from what is known of them, the measurement function is evaluated for all draws at once, and
the output's mean, standard deviation and coverage intervals are read off the sorted values (7.5 to 7.7).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

TRIALS = 1_000_000
"""Draws that are often enough for a 95 % interval with two digits (JCGM 101, 7.2.1)."""


class Distribution(Protocol):
    """What is known of one input, or of several that go together."""

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,) or (trials, inputs)."""
        ...


@dataclass(frozen=True)
class Normal:
    """Gaussian (JCGM 101, 6.4.7)."""

    mean: float
    standard_deviation: float

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,)."""
        return generator.normal(self.mean, self.standard_deviation, trials)


@dataclass(frozen=True)
class StudentT:
    """Scaled and shifted t (JCGM 101, 6.4.9): *scale* is the standard uncertainty of type A.

    With infinite degrees of freedom it is Gaussian.
    """

    centre: float
    scale: float
    degrees_of_freedom: float

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,)."""
        if np.isinf(self.degrees_of_freedom):
            return generator.normal(self.centre, self.scale, trials)
        return np.asarray(self.centre + self.scale * generator.standard_t(self.degrees_of_freedom, trials))


@dataclass(frozen=True)
class Rectangular:
    """Anything between two limits alike (JCGM 101, 6.4.2)."""

    low: float
    high: float

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,)."""
        return generator.uniform(self.low, self.high, trials)


@dataclass(frozen=True)
class Triangular:
    """Symmetric triangle between two limits (JCGM 101, 6.4.5)."""

    low: float
    high: float

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,)."""
        return generator.triangular(self.low, (self.low + self.high) / 2.0, self.high, trials)


@dataclass(frozen=True)
class ArcSine:
    """A sine of unknown phase, *half_width* about *centre* (JCGM 101, 6.4.6)."""

    centre: float
    half_width: float

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,)."""
        return np.asarray(self.centre + self.half_width * np.sin(generator.uniform(0, 2 * np.pi, trials)))


@dataclass(frozen=True)
class TwoPoint:
    """One of two values *half_width* on either side of *centre*, equally likely: its SD is the half-width."""

    centre: float
    half_width: float

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials,)."""
        return np.asarray(self.centre + self.half_width * (2.0 * generator.integers(0, 2, trials) - 1.0))


@dataclass(frozen=True)
class Multivariate:
    """Several inputs that are jointly Gaussian (JCGM 101, 6.4.8)."""

    means: tuple[float, ...]
    covariance: FloatArray

    def draw(self, generator: np.random.Generator, trials: int) -> FloatArray:
        """Return draws, shape (trials, inputs)."""
        return generator.multivariate_normal(self.means, self.covariance, trials)


@dataclass(frozen=True)
class OutputDistribution:
    """What a Monte Carlo run says of one output.

    Attributes
    ----------
    mean, standard_uncertainty
        Of the drawn values.
    symmetric
        The probabilistically symmetric coverage interval: equal probability on either side (7.7.2).
    shortest
        The shortest coverage interval (7.7.4).
    level
        Coverage of both.
    trials
        Number of draws.
    """

    mean: float
    standard_uncertainty: float
    symmetric: tuple[float, float]
    shortest: tuple[float, float]
    level: float
    trials: int


def propagate_distributions(
    function: Callable[..., FloatArray],
    inputs: Sequence[Distribution],
    *,
    seed: int,
    trials: int = TRIALS,
    level: float = 0.95,
) -> OutputDistribution:
    """Propagate distributions of independent inputs through *function*.

    Parameters
    ----------
    function
        Takes the draws of every input, shape (trials,) each (or (trials, inputs) of those that go together),
        and returns the output's, shape (trials,).
    inputs
        One distribution an argument.
    seed
        Of the random numbers.
    trials
        Number of draws.
    level
        Coverage of the intervals.
    """
    generator = np.random.default_rng(seed)
    drawn = [one.draw(generator, trials) for one in inputs]
    return distribution_of(np.asarray(function(*drawn), dtype=np.float64), level)


def distribution_of(values: FloatArray, level: float = 0.95) -> OutputDistribution:
    """Return what drawn *values*, shape (trials,), say; their order does not matter."""
    ordered = np.sort(values)
    trials = len(ordered)
    inside = min(int(level * trials + 0.5), trials - 1)
    first = (trials - inside) // 2
    start = int(np.argmin(ordered[inside:] - ordered[: trials - inside]))
    return OutputDistribution(
        float(values.mean()),
        float(values.std(ddof=1)),
        (float(ordered[first]), float(ordered[min(first + inside, trials - 1)])),
        (float(ordered[start]), float(ordered[start + inside])),
        level,
        trials,
    )
