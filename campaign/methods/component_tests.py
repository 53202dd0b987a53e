"""Is a component of spread there at all? Tests on the lines of the runs.

Every run is reduced to its own line (intercept and slope, or a mean where there are too few levels) and to
what is left of it. Under the hypothesis that a component is zero, the lines of its units spread no more than
the lines of the units below them, so that Wilks' Λ of the two spreads has a known distribution: for lines
(two values) and for means (one) it is an exact F (Mardia, Kent & Bibby, *Multivariate Analysis*, 1979, 12.3
and table 3.7.1). This holds when all runs have the same readings and all units the same numbers of runs;
numbers of sensors and modules may differ (Seely & El-Bassiouny, Ann. Statist. 11 (1983) 197). Otherwise, and
where runs are shared so that no exact test exists for modules, the same statistic is compared with its values
in campaigns drawn from the model without the component (parametric bootstrap).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import sparse, stats

from campaign.methods.identifiability import Units, distinct_rows

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
Draw = Callable[[str, int], FloatArray]
Kind = Literal["exact F", "parametric bootstrap"]

REPLICATES = 499
"""Campaigns drawn for one bootstrap test."""


@dataclass(frozen=True)
class ComponentTest:
    """The test of one component.

    Attributes
    ----------
    component
        Its name.
    kind
        ``exact F`` or ``parametric bootstrap``.
    statistic
        F; for modules and mountings that share runs, the mean ratio of spreads.
    p
        Probability of a statistic at least as large without the component.
    degrees_of_freedom
        Of numerator and denominator; of no meaning for a bootstrap of a ratio, then 0.
    """

    component: str
    kind: Kind
    statistic: float
    p: float
    degrees_of_freedom: tuple[float, float]


@dataclass(frozen=True)
class RunTable:
    """Runs, their units, and how readings become lines.

    Attributes
    ----------
    order, starts
        Readings sorted by run, and where each run starts among them.
    design
        Shape (readings, d), sorted: columns of a run's line.
    weights
        Shape (readings, d), sorted: the line's coefficients are the sums over a run of weights × signal.
    branch, level, cell
        Sorted: branch code, level, and level × direction.
    units
        Unit name → its code, shape (runs,).
    equal
        Whether all runs have the same readings.
    """

    order: IntArray
    starts: IntArray
    design: FloatArray
    weights: FloatArray
    branch: FloatArray
    level: IntArray
    cell: IntArray
    units: dict[str, IntArray]
    equal: bool

    @property
    def run(self) -> IntArray:
        """Run of every sorted reading."""
        counts = np.diff(np.append(self.starts, len(self.order)))
        return np.repeat(np.arange(len(self.starts)), counts)


def tabulate_runs(units: Units, z: FloatArray, *, line: bool) -> RunTable:
    """Return the runs of a campaign.

    Parameters
    ----------
    units
        Codes of the readings' units.
    z
        Shape (readings,), reference value.
    line
        Whether a run has a line (three levels or more) or a mean only.
    """
    order = np.lexsort((z, units.branch, units.run))
    run = units.run[order]
    starts = np.flatnonzero(np.r_[True, np.diff(run) != 0])
    design = np.column_stack([np.ones(len(z)), z])[order, : 2 if line else 1]
    gram = np.add.reduceat(design[:, :, None] * design[:, None, :], starts)
    counts = np.diff(np.append(starts, len(run)))
    inverse = np.linalg.pinv(gram, hermitian=True)[np.repeat(np.arange(len(starts)), counts)]
    names = ("generation", "batch", "module", "sensor", "session", "mounting", "shared_run", "place")
    cell = distinct_rows(units.level, units.direction)[1]
    return RunTable(
        order=order,
        starts=starts,
        design=design,
        weights=np.einsum("nij,nj->ni", inverse, design),
        branch=units.branch[order],
        level=units.level[order],
        cell=cell[order],
        units={name: getattr(units, name)[order][starts] for name in names},
        equal=_all_alike(cell[order], starts, counts),
    )


def _all_alike(cell: IntArray, starts: IntArray, counts: IntArray) -> bool:
    if len(np.unique(counts)) > 1:
        return False
    table = np.sort(cell.reshape(len(starts), -1), axis=1)
    return bool((table == table[0]).all())


def run_lines(table: RunTable, response: FloatArray) -> FloatArray:
    """Return the lines of all runs, (runs, d, replicates), of *response*, (readings, replicates)."""
    ordered = response[table.order]
    if response.shape[1] < _MANY:
        lines = [np.add.reduceat(column[:, None] * ordered, table.starts) for column in table.weights.T]
    else:
        run = table.run
        lines = [_added_up(ordered, run, len(table.starts), column) for column in table.weights.T]
    return np.stack(lines, axis=1)


def rest_of_runs(table: RunTable, response: FloatArray, lines: FloatArray) -> FloatArray:
    """Return what is left of the sorted readings after their runs' lines, shape (readings, replicates)."""
    rest, run = response[table.order], table.run
    for k, column in enumerate(table.design.T):
        rest -= column[:, np.newaxis] * lines[run, k]
    return np.asarray(rest)


@dataclass(frozen=True)
class Strata:
    """Which levels a design has, for choosing what each component is compared with.

    Attributes
    ----------
    terms
        Names of the random terms of the model.
    shared
        Whether runs are shared by the sensors of a module.
    positions
        Whether positions are a factor.
    """

    terms: tuple[str, ...]
    shared: bool
    positions: bool

    @property
    def group(self) -> str:
        """The unit within which modules are compared."""
        return "batch" if "batch" in self.terms else "generation"

    @property
    def below_sensor(self) -> tuple[str, str]:
        """Unit that spreads within a sensor, and what it shares with the other sensors of its module."""
        return ("session", "mounting") if "session" in self.terms else ("run", "shared_run")


@dataclass(frozen=True)
class Spread:
    """Sums of squares and products of a factor's effects, (d, d, replicates), with degrees of freedom."""

    products: FloatArray
    freedom: int

    @property
    def mean(self) -> FloatArray:
        """Mean squares and products, shape (replicates, d, d)."""
        return np.moveaxis(self.products, -1, 0) / max(self.freedom, 1)


def compare_components(
    table: RunTable, strata: Strata, response: FloatArray, draw: Draw
) -> tuple[ComponentTest, ...]:
    """Test every component of a model.

    Parameters
    ----------
    table
        Runs and their units.
    strata
        Terms of the model, sharing, positions.
    response
        Shape (readings,), fixed part taken off.
    draw
        ``draw(component, replicates)`` returns deviations, shape (readings, replicates), of campaigns without
        the component; called only where no exact test exists.

    Returns
    -------
    tuple of ComponentTest
        In the order of the terms; components without degrees of freedom are left out.
    """
    tests = (_test(name, table, strata, response[:, np.newaxis], draw) for name in strata.terms)
    return tuple(test for test in tests if test is not None)


def compare_positions(
    table: RunTable, strata: Strata, response: FloatArray, draw: Draw
) -> ComponentTest | None:
    """Test whether the lines of sensors differ by position, beside their modules.

    Arguments as in :func:`compare_components`, but for *response*, which keeps what positions explain.
    ``None`` where positions are no factor of the model.
    """
    return _test("position", table, strata, response[:, np.newaxis], draw) if strata.positions else None


def _test(
    name: str, table: RunTable, strata: Strata, response: FloatArray, draw: Draw
) -> ComponentTest | None:
    exact = _is_exact(name, table, strata)
    observed, freedom = _statistic(name, table, strata, response)
    if freedom is None or not np.isfinite(observed).all():
        return None
    statistic = float(observed[0])
    if exact:
        return ComponentTest(name, "exact F", statistic, float(stats.f.sf(statistic, *freedom)), freedom)
    drawn = _drawn_statistics(name, table, strata, draw(name, REPLICATES))
    if not np.isfinite(drawn).all():
        return None
    larger = int(np.sum(drawn >= statistic * (1 - 1e-12)))
    shown = (0.0, 0.0) if _shares_runs(name, strata) else freedom
    return ComponentTest(name, "parametric bootstrap", statistic, (1 + larger) / (1 + REPLICATES), shown)


_AT_ONCE = 2_000_000
"""Drawn readings to look at at once."""


def _drawn_statistics(name: str, table: RunTable, strata: Strata, drawn: FloatArray) -> FloatArray:
    """The statistic of every drawn campaign, of some together."""
    step = max(_AT_ONCE // len(drawn), _MANY)
    parts = [drawn[:, first : first + step] for first in range(0, drawn.shape[1], step)]
    return np.concatenate([_statistic(name, table, strata, part)[0] for part in parts])


def _shares_runs(name: str, strata: Strata) -> bool:
    """Whether a component is compared with a sum of two spreads, so that no exact test exists."""
    above = {"module": ("mounting", "run"), "mounting": ("run",)}.get(name, ())
    return any(term in strata.terms for term in above)


def _is_exact(name: str, table: RunTable, strata: Strata) -> bool:
    if not table.equal or _shares_runs(name, strata):
        return False
    if name in ("repetition", "sensor_by_level", "sensor_by_direction"):
        return True
    units = table.units
    runs_a_sensor = np.bincount(units["sensor"])
    same = len(np.unique(runs_a_sensor[runs_a_sensor > 0])) == 1
    if name == "batch":
        sensors = distinct_rows(units["module"], units["sensor"])[0][:, 0]
        same &= len(np.unique(np.bincount(sensors)[np.unique(sensors)])) == 1
    if name == "run":
        same &= len(np.unique(np.bincount(units["shared_run"]))) == 1
    if "session" in strata.terms:
        same &= len(np.unique(np.bincount(units["session"]))) == 1
    return same


_Statistic = tuple[FloatArray, tuple[float, float] | None]
_NOTHING: _Statistic = (np.full(1, np.nan), None)


def _statistic(name: str, table: RunTable, strata: Strata, response: FloatArray) -> _Statistic:
    lines = run_lines(table, response)
    if name == "sensor_by_direction":
        return _direction_statistic(table, response)
    if name in ("repetition", "sensor_by_level"):
        rest = rest_of_runs(table, response, lines)
        if name == "repetition":
            return _repetition_statistic(table, strata, lines, rest)
        return _level_statistic(table, rest)
    effect, error = _compared(name, table, strata, lines)
    if effect.freedom < 1 or error is None:
        return _NOTHING
    return wilks(effect, error) if isinstance(error, Spread) else _ratio(effect, error)


def _compared(
    name: str, table: RunTable, strata: Strata, lines: FloatArray
) -> tuple[Spread, Spread | tuple[Spread, Spread] | None]:
    """The spread of a component's units and the spread, or the two spreads, that it is compared with."""
    units, places = table.units, ["place"] if strata.positions else []
    if name == "position":
        means, of = mean_lines(lines, units, "sensor")
        return spreads(means, [of["module"]], of["place"])
    if name in ("batch", "module"):
        means, of = mean_lines(lines, units, "sensor")
        base = {"batch": "generation", "module": strata.group}[name]
        effect, rest = spreads(means, [of[key] for key in [base, *places]], of[name])
        if name == "batch":
            return effect, spreads(means, [of[key] for key in ["batch", *places]], of["module"])[0]
        return effect, _with_shared(rest, table, strata, lines, "module")
    below, partner = strata.below_sensor
    means, of = (lines, units) if below == "run" else mean_lines(lines, units, "session")
    if name == "sensor":
        nuisance = [of[partner]] if strata.shared else [of["module"]]
        return spreads(means, [*nuisance, *(of[key] for key in places)], of["sensor"])
    if name == "mounting":
        effect, rest = spreads(means, [of["sensor"]], of["mounting"])
        return effect, _with_shared(rest, table, strata, lines, "mounting")
    if name == "session":
        effect, _ = spreads(
            lines, [units["sensor"], *_if(strata.shared, units["mounting"])], units["session"]
        )
        return effect, spreads(lines, _if(strata.shared, units["shared_run"]), units["session"])[1]
    return spreads(lines, [units["mounting"], units["session"]], units["shared_run"])


def _if(condition: bool, code: IntArray) -> list[IntArray]:
    return [code] if condition else []


def _with_shared(
    rest: Spread, table: RunTable, strata: Strata, lines: FloatArray, name: str
) -> Spread | tuple[Spread, Spread]:
    """*rest*, and beside it the spread of the shared units below where the model has them."""
    units = table.units
    if name == "module" and "mounting" in strata.terms:
        means, of = mean_lines(lines, units, "session")
        return rest, spreads(means, [of["sensor"]], of["mounting"])[0]
    if "run" in strata.terms:
        return rest, spreads(lines, [units["mounting"], units["session"]], units["shared_run"])[0]
    return rest


def mean_lines(
    lines: FloatArray, units: dict[str, IntArray], name: str
) -> tuple[FloatArray, dict[str, IntArray]]:
    """Return the mean line of every unit of *name*, and the codes of the units that it belongs to."""
    _, first, counts = np.unique(units[name], return_index=True, return_counts=True)
    means = group_sums(lines, units[name]) / counts[:, np.newaxis, np.newaxis]
    return means, {key: code[first] for key, code in units.items()}


def spreads(values: FloatArray, base: list[IntArray], factor: IntArray) -> tuple[Spread, Spread]:
    """Split values into a factor's effects beyond others and what is left.

    Parameters
    ----------
    values
        Shape (units, d, replicates).
    base
        Codes of the factors that are taken off first; none: nothing is.
    factor
        Codes of the factor.

    Returns
    -------
    tuple of Spread
        Of the factor beyond *base*, and of the rest.
    """
    before, rank_before = _basis(base, len(values))
    after, rank_after = _basis([*base, factor], len(values))
    left_before = values - _project(before, values)
    left_after = values - _project(after, values)
    rest = np.einsum("udr,uer->der", left_after, left_after)
    effect = np.einsum("udr,uer->der", left_before, left_before) - rest
    return Spread(effect, rank_after - rank_before), Spread(rest, len(values) - rank_after)


def _project(basis: FloatArray, values: FloatArray) -> FloatArray:
    flat = values.reshape(len(values), -1)
    return np.asarray((basis @ (basis.T @ flat)).reshape(values.shape))


def _basis(factors: list[IntArray], count: int) -> tuple[FloatArray, int]:
    """Orthonormal basis of the indicator columns of *factors*."""
    if not factors:
        return np.zeros((count, 0)), 0
    columns = np.hstack([np.equal.outer(code, np.unique(code)).astype(float) for code in factors])
    values, vectors = np.linalg.eigh(columns.T @ columns)
    kept = values > 1e-9 * values[-1]
    return columns @ (vectors[:, kept] / np.sqrt(values[kept])), int(kept.sum())


def wilks(effect: Spread, error: Spread) -> _Statistic:
    """Return the F of Wilks' Λ for one or two values, shape (replicates,), with its degrees of freedom."""
    width = effect.products.shape[0]
    if error.freedom < width:
        return _NOTHING
    if width == 1:
        ratio = effect.mean[:, 0, 0] / error.mean[:, 0, 0]
        return ratio, (float(effect.freedom), float(error.freedom))
    inner = np.linalg.det(np.moveaxis(error.products, -1, 0))
    outer = np.linalg.det(np.moveaxis(error.products + effect.products, -1, 0))
    root = np.sqrt(np.clip(inner / outer, 1e-300, 1.0))
    freedom = (2.0 * effect.freedom, 2.0 * (error.freedom - 1))
    return (1.0 - root) / root * freedom[1] / freedom[0], freedom


def _ratio(effect: Spread, errors: tuple[Spread, Spread]) -> _Statistic:
    """Mean ratio of a spread to the sum of two others, all as mean squares."""
    if min(error.freedom for error in errors) < 1:
        return _NOTHING
    total = errors[0].mean + errors[1].mean
    ratio = np.trace(np.linalg.solve(total, effect.mean), axis1=1, axis2=2) / total.shape[-1]
    return ratio, (float(effect.freedom), float(errors[0].freedom))


def _repetition_statistic(table: RunTable, strata: Strata, lines: FloatArray, rest: FloatArray) -> _Statistic:
    """Spread of the lines of a sensor's runs against the noise within runs, about the sensor's own levels."""
    units = table.units
    name = "session" if "session" in strata.terms else "sensor"
    _, within = spreads(lines, _if(strata.shared, units["shared_run"]), units[name])
    gram = np.einsum("ni,nj->ij", table.design, table.design) / len(table.starts)
    own = table.units["sensor"][table.run] * (int(table.cell.max()) + 1) + table.cell
    noise = np.sum((rest - group_means(rest, own)) ** 2, axis=0)
    width = table.design.shape[1]
    runs = len(table.starts) - len(np.unique(units["sensor"]))
    freedom = (float(width * within.freedom), len(rest) / len(table.starts) * runs - width * runs)
    if min(freedom) < 1:
        return _NOTHING
    return np.einsum("ij,ijr->r", gram, within.products) / freedom[0] / (noise / freedom[1]), freedom


def _level_statistic(table: RunTable, rest: FloatArray) -> _Statistic:
    """What a sensor repeats at its levels against what it does not, both after the runs' lines."""
    levels = int(table.level.max()) + 1
    sensor = table.units["sensor"][table.run]
    at_level = group_means(rest, table.run * levels + table.level)
    own = group_means(at_level, sensor * levels + table.level)
    common = group_means(at_level, table.units["generation"][table.run] * levels + table.level)
    sensors = len(np.unique(sensor)) - len(np.unique(table.units["generation"]))
    runs = len(table.starts) - len(np.unique(sensor))
    each = len(np.unique(table.level)) - table.design.shape[1]
    if min(sensors, runs, each) < 1:
        return _NOTHING
    between = np.sum((own - common) ** 2, axis=0) / (sensors * each)
    within = np.sum((at_level - own) ** 2, axis=0) / (runs * each)
    return between / within, (float(sensors * each), float(runs * each))


def _direction_statistic(table: RunTable, response: FloatArray) -> _Statistic:
    """Spread of the loop widths of sensors against that of a sensor's runs, both beside the runs' lines."""
    design = np.column_stack([table.design, table.branch])
    gram = np.add.reduceat(design[:, :, None] * design[:, None, :], table.starts)
    sums = np.add.reduceat(design[:, :, None] * response[table.order][:, None, :], table.starts)
    widths = (np.linalg.pinv(gram, hermitian=True) @ sums)[:, -1:, :]
    effect, rest = spreads(widths, [table.units["generation"]], table.units["sensor"])
    if min(effect.freedom, rest.freedom) < 1:
        return _NOTHING
    return wilks(effect, rest)


def group_means(values: FloatArray, code: IntArray) -> FloatArray:
    """Return the mean of its group beside every row, shape (rows, replicates)."""
    _, inverse, counts = np.unique(code, return_inverse=True, return_counts=True)
    return np.asarray((group_sums(values, code) / counts[:, np.newaxis])[inverse.ravel()])


def group_sums(values: FloatArray, code: IntArray) -> FloatArray:
    """Return the sums of the rows of every group, sorted by code, shape (groups, …)."""
    if values[0].size < _MANY:
        order = np.argsort(code, kind="stable")
        starts = np.flatnonzero(np.r_[True, np.diff(code[order]) != 0])
        return np.asarray(np.add.reduceat(values[order], starts, axis=0))
    names, own = np.unique(code, return_inverse=True)
    return _added_up(values, own.ravel(), len(names))


_MANY = 8
"""Columns from which a matrix that adds up rows is faster."""


def _added_up(
    values: FloatArray, code: IntArray, groups: int, weights: FloatArray | None = None
) -> FloatArray:
    """Sums of the weighted rows of groups 0, 1, …, shape (groups, …)."""
    ones = np.ones(len(code)) if weights is None else weights
    added = sparse.csr_array((ones, (code, np.arange(len(code)))), shape=(groups, len(code)))
    return np.asarray(added @ values.reshape(len(values), -1)).reshape(groups, *values.shape[1:])
