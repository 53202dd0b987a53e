"""What a planned campaign would resolve, from components of variance: half-width, power, allocation.

A generation's mean of M modules with S sensors, Q mountings and R runs a mounting has the variance

    (a + b/Q + c/(Q R) + d/S + e/(S Q) + f/(S Q R)) / M

with the components of :class:`Strata`. The module is the unit: two generations of M modules leave 2 (M − 1)
degrees of freedom.

Sources: Searle, Casella & McCulloch, *Variance Components* (1992), 3.6 (variance of a nested mean); Cochran,
*Sampling Techniques* (1977), 10.6 and 10.9 (allocation for given costs); power from the noncentral t
distribution, Johnson, Kotz & Balakrishnan, *Continuous Univariate Distributions* 2 (1995), ch. 31.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import astuple, dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

FloatArray = npt.NDArray[np.float64]

LEVEL = 0.95
FEWEST_MODULES = 2


@dataclass(frozen=True)
class Strata:
    """Variances by what has to be repeated to average them out, in one unit squared.

    Attributes
    ----------
    module
        Between modules.
    module_mounting, module_run
        Of a module's mountings and runs, shared by all its sensors.
    sensor
        Between the sensors of a module.
    sensor_mounting, sensor_run
        Of a sensor's own mountings and runs.
    """

    module: float
    sensor: float = 0.0
    sensor_run: float = 0.0
    module_mounting: float = 0.0
    module_run: float = 0.0
    sensor_mounting: float = 0.0


@dataclass(frozen=True)
class Design:
    """Modules a generation, sensors a module, runs a mounting, mountings a module."""

    modules: int
    sensors: int
    repetitions: int
    sessions: int = 1


@dataclass(frozen=True)
class Costs:
    """Cost of one more module, of one more sensor in it, and of one more run of a sensor; any one unit."""

    module: float
    sensor: float
    repetition: float

    def of(self, design: Design, generations: int = 2) -> float:
        """Return the cost of *design* for so many generations."""
        runs = design.sessions * design.repetitions
        one = self.module + design.sensors * (self.sensor + runs * self.repetition)
        return generations * design.modules * one


@dataclass(frozen=True)
class Allocation:
    """Sensors a module and runs a sensor that are cheapest for any precision, before rounding."""

    sensors: float
    repetitions: float


def weights_of_mean(design: Design) -> Mapping[str, float]:
    """Return what each component of :class:`Strata` is multiplied by in the variance of a mean."""
    modules, sensors, sessions = design.modules, design.sensors, design.sessions
    runs = sessions * design.repetitions
    return {
        "module": 1.0 / modules,
        "sensor": 1.0 / (modules * sensors),
        "sensor_run": 1.0 / (modules * sensors * runs),
        "module_mounting": 1.0 / (modules * sessions),
        "module_run": 1.0 / (modules * runs),
        "sensor_mounting": 1.0 / (modules * sensors * sessions),
    }


def variance_of_mean(strata: Strata, design: Design) -> float:
    """Return the variance of a generation's mean."""
    weights = weights_of_mean(design).values()
    return float(sum(part * weight for part, weight in zip(astuple(strata), weights, strict=True)))


def freedom_of_difference(modules: int, generations: int = 2) -> int:
    """Return the degrees of freedom that the modules leave."""
    return generations * (modules - 1)


def half_width_of_difference(variance: float, freedom: float) -> float:
    """Return the half-width of the 95 % interval of a difference whose variance is *variance*."""
    return float(stats.t.ppf((1 + LEVEL) / 2, freedom)) * math.sqrt(variance)


def power_of_difference(difference: float, variance: float, freedom: float) -> float:
    """Return the probability that a two-sided test at 5 % finds a true *difference*.

    From the noncentral t distribution with *freedom* degrees of freedom and noncentrality
    difference/√variance.
    """
    if variance <= 0:
        return 1.0 if difference else 1 - LEVEL
    return power_at(abs(difference) / math.sqrt(variance), freedom)


def power_at(noncentrality: float, freedom: float) -> float:
    """Return the power of a two-sided t test at 5 % for a noncentrality of at least 0."""
    return float(powers_at(np.array([noncentrality]), freedom)[0])


def powers_at(noncentralities: npt.NDArray[np.float64], freedom: float) -> npt.NDArray[np.float64]:
    """Return the power of a two-sided t test at 5 % for noncentralities of at least 0."""
    critical = float(stats.t.ppf((1 + LEVEL) / 2, freedom))
    upper = stats.nct.sf(critical, freedom, noncentralities)
    lower = stats.nct.cdf(-critical, freedom, noncentralities)
    found = np.minimum(1.0, upper + np.where(np.isfinite(lower), lower, 0.0))
    return np.where(noncentralities == 0, 1 - LEVEL, found)


def spread_factors(modules: int) -> tuple[float, float]:
    """Return what an SD of *modules* module means is multiplied by for its 95 % limits.

    Examples
    --------
    >>> [round(f, 2) for f in spread_factors(4)]
    [0.57, 3.73]
    """
    freedom = modules - 1
    tails = stats.chi2.ppf([(1 + LEVEL) / 2, (1 - LEVEL) / 2], freedom)
    low, high = np.sqrt(freedom / tails)
    return float(low), float(high)


def optimal_allocation(strata: Strata, costs: Costs) -> Allocation:
    """Return the sensors a module and runs a sensor that buy the most precision for any money.

    S = √(c_m σ_s²/(c_s σ_m²)) and R = √(c_s σ_e²/(c_r σ_s²)), one mounting; infinite where the level above
    does not spread.
    """
    return Allocation(
        allocation_ratio(costs.module, costs.sensor, strata.module, strata.sensor),
        allocation_ratio(costs.sensor, costs.repetition, strata.sensor, strata.sensor_run),
    )


def allocation_ratio(outer_cost: float, inner_cost: float, outer: float, inner: float) -> float:
    """Return how many inner units a unit of the outer level should have: √(c₁ σ₂²/(c₂ σ₁²)).

    Examples
    --------
    >>> round(allocation_ratio(20.0, 0.12, 32.0, 12.0), 3)
    7.906
    """
    if inner <= 0:
        return 0.0
    if outer <= 0 or inner_cost <= 0:
        return math.inf
    return math.sqrt(outer_cost * inner / (inner_cost * outer))


@dataclass(frozen=True)
class Reach:
    """How far a search looks: largest numbers of modules a generation, sensors a module, runs a mounting."""

    modules: int
    sensors: int
    repetitions: int


def cheapest_design(
    strata: Strata, costs: Costs, half_width: float, reach: Reach, sessions: int = 1
) -> Design | None:
    """Return the cheapest whole-numbered design of two generations whose half-width is at most *half_width*.

    ``None`` where none within *reach* does it. Of equally cheap ones the more precise.
    """
    found = [
        (costs.of(design), width, design)
        for design in _designs(reach, sessions)
        if (width := _half_width(strata, design)) <= half_width
    ]
    return min(found, key=lambda one: one[:2])[2] if found else None


def best_design(
    strata: Strata, costs: Costs, budget: float, reach: Reach, sessions: int = 1
) -> Design | None:
    """Return the most precise whole-numbered design of two generations that costs at most *budget*.

    ``None`` where not even the smallest is paid for. Of equally precise ones the cheaper.
    """
    found = [
        (_half_width(strata, design), cost, design)
        for design in _designs(reach, sessions)
        if (cost := costs.of(design)) <= budget * (1 + 1e-12)
    ]
    return min(found, key=lambda one: one[:2])[2] if found else None


def _half_width(strata: Strata, design: Design) -> float:
    variance = 2.0 * variance_of_mean(strata, design)
    return QUANTILES[freedom_of_difference(design.modules)] * math.sqrt(variance)


def _designs(reach: Reach, sessions: int) -> Iterator[Design]:
    for modules in range(FEWEST_MODULES, reach.modules + 1):
        for sensors in range(1, reach.sensors + 1):
            for repetitions in range(1, reach.repetitions + 1):
                yield Design(modules, sensors, repetitions, sessions)


MOST_MODULES = 60
QUANTILES: tuple[float, ...] = (
    math.nan,
    *map(float, np.asarray(stats.t.ppf((1 + LEVEL) / 2, np.arange(1, 2 * MOST_MODULES + 1)))),
)
"""97.5 % quantile of Student's t by degrees of freedom."""
