"""An uncertainty budget: lines, their combination, and the expanded uncertainty (JCGM 100:2008, the GUM).

Lines that rest on one estimate, or are correlated otherwise, form a group and are combined before degrees of
freedom are counted (Welch–Satterthwaite, G.4.1, holds for independent parts only).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import special

from campaign.methods.monte_carlo import OutputDistribution, distribution_of

Shape = Literal["normal", "t", "rectangular", "two-point"]

DIVISORS: dict[str, float] = {"normal": 1.0, "t": 1.0, "rectangular": math.sqrt(3.0), "two-point": 1.0}
"""What the half-width of a distribution is divided by for its standard uncertainty (GUM 4.3.7; a two-point
one has its half-width as its standard deviation). Normal and t are given by their standard uncertainty."""


@dataclass(frozen=True)
class BudgetLine:
    """One source of a budget.

    Attributes
    ----------
    source
        Its name.
    half_width
        Standard uncertainty of a normal or t input, else half its width; in the input's unit.
    shape
        Its distribution.
    sensitivity
        Change of the output per unit of the input.
    degrees_of_freedom
        Of its standard uncertainty; infinite where it is taken as known.
    group
        Lines of one group rest on one estimate; an empty group is the line's own.
    """

    source: str
    half_width: float
    shape: Shape = "normal"
    sensitivity: float = 1.0
    degrees_of_freedom: float = math.inf
    group: str = ""

    @property
    def divisor(self) -> float:
        """What the half-width is divided by."""
        return DIVISORS[self.shape]

    @property
    def standard_uncertainty(self) -> float:
        """Of the input."""
        return abs(self.half_width) / self.divisor

    @property
    def contribution(self) -> float:
        """Standard uncertainty that the source gives the output."""
        return abs(self.sensitivity) * self.standard_uncertainty


@dataclass(frozen=True)
class CombinedUncertainty:
    """What the lines of a budget come to.

    Attributes
    ----------
    standard_uncertainty
        Root of the sum of squared contributions.
    degrees_of_freedom
        Effective, not rounded; infinite where every line is taken as known.
    coverage_factor, expanded_uncertainty
        k and U = k u.
    """

    standard_uncertainty: float
    degrees_of_freedom: float
    coverage_factor: float
    expanded_uncertainty: float


def combine(lines: Sequence[BudgetLine], level: float = 0.95) -> CombinedUncertainty:
    """Combine independent lines (those of one group first) into u, ν_eff, k and U."""
    parts = group_variances(lines)
    variances = np.array([variance for variance, _ in parts.values()])
    freedoms = np.array([freedom for _, freedom in parts.values()])
    standard = math.sqrt(float(variances.sum()))
    freedom = welch_satterthwaite(np.sqrt(variances), freedoms)
    factor = coverage_factor(freedom, level)
    return CombinedUncertainty(standard, freedom, factor, factor * standard)


def group_variances(lines: Sequence[BudgetLine]) -> dict[str, tuple[float, float]]:
    """Return the variance and degrees of freedom of every group, lines without one by their place."""
    parts: dict[str, tuple[float, float]] = {}
    for number, line in enumerate(lines):
        name = line.group or f"#{number}"
        before = parts.get(name, (0.0, line.degrees_of_freedom))
        parts[name] = before[0] + line.contribution**2, min(before[1], line.degrees_of_freedom)
    return parts


def welch_satterthwaite(contributions: Sequence[float] | np.ndarray, degrees_of_freedom: object) -> float:
    """Return ν_eff = u⁴ / Σ uᵢ⁴/νᵢ (GUM G.2b) of independent contributions uᵢ with degrees of freedom νᵢ.

    Infinite where no part has limited degrees of freedom.
    """
    squares = np.asarray(contributions, dtype=np.float64) ** 2
    spent = float(np.sum(squares**2 / np.asarray(degrees_of_freedom, dtype=np.float64)))
    return float(squares.sum() ** 2 / spent) if spent > 0 else math.inf


def coverage_factor(degrees_of_freedom: float, level: float = 0.95) -> float:
    """Return the two-sided quantile of Student's t, the normal one for infinite degrees of freedom."""
    return float(special.stdtrit(degrees_of_freedom, (1.0 + level) / 2.0))


def degrees_of_relative_uncertainty(relative: float) -> float:
    """Return ν ≈ ½ (Δu/u)⁻² of a standard uncertainty known to within *relative* (GUM G.4.2, G.3)."""
    return 0.5 / relative**2 if relative > 0 else math.inf


def draw_budget(
    lines: Sequence[BudgetLine], *, seed: int, trials: int, level: float = 0.95
) -> OutputDistribution:
    """Return the distribution of the sum of all errors by Monte Carlo (JCGM 101), about zero.

    Normal and t lines of one group are one t variable of the group's variance; every other line is drawn by
    itself.
    """
    generator = np.random.default_rng(seed)
    total = np.zeros(trials)
    smooth = [line for line in lines if line.shape in ("normal", "t")]
    for variance, freedom in group_variances(smooth).values():
        draws = (
            generator.standard_t(freedom, trials) if math.isfinite(freedom) else generator.normal(size=trials)
        )
        total += math.sqrt(variance) * draws
    for line in lines:
        reach = abs(line.sensitivity) * abs(line.half_width)
        if line.shape == "rectangular":
            total += generator.uniform(-reach, reach, trials)
        elif line.shape == "two-point":
            total += reach * (2.0 * generator.integers(0, 2, trials) - 1.0)
    return distribution_of(total, level)
