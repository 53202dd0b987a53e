"""Limits of components of spread by a second road, for balanced campaigns: modified large sample.

Every run is reduced to the value of its line at a place, and to what is left of it about the line. Where all
runs have the same readings and all units the same numbers of runs, the mean squares of these values between
batches, modules, mountings, sensors and runs are independent multiples of χ², and with those of the readings
about the lines they give an interval of every component without any likelihood
(:mod:`campaign.methods.modified_large_sample`). With both branches the turning level has one reading and the
others two: the mean square of sensor × level is then χ² to a very good approximation only.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.variance_fit import LINES, PLACES, GenerationFit
from campaign.analyses.variance_tests import runs_of
from campaign.methods.component_tests import RunTable, group_means, rest_of_runs, run_lines
from campaign.methods.identifiability import two_way_rank
from campaign.methods.modified_large_sample import MeanSquares
from campaign.methods.variance_ratios import VarianceInterval

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

BalancedIntervals = dict[tuple[str, str], VarianceInterval]
"""(component or ``total``, place) → estimate and limits of its variance."""

_HOLDS = {
    "batch": LINES,
    "module": ("module", "mounting", "run", "sensor", "session", "repetition"),
    "mounting": ("mounting", "run", "session", "repetition"),
    "run": ("run", "repetition"),
    "sensor": ("sensor", "session", "repetition"),
    "session": ("session", "repetition"),
    "repetition": ("repetition",),
}
"""Component → the components whose effects its mean square holds; absent ones are passed over."""

_ABOVE_SENSOR = ("batch", "module", "sensor")
"""Components whose mean squares hold what a sensor repeats beside its line."""


@dataclass(frozen=True)
class _Row:
    """A mean square of run values: between units of *factor*, within *inside* and beside *beside*."""

    name: str
    factor: IntArray
    inside: IntArray
    beside: IntArray

    @property
    def freedom(self) -> int:
        return two_way_rank(self.factor, self.beside) - two_way_rank(self.inside, self.beside)

    def square(self, values: FloatArray) -> FloatArray:
        """Mean square of run *values*, (runs, places); factors are orthogonal where runs are balanced."""
        rest = values - group_means(values, self.inside)
        rest = rest - group_means(rest, self.beside)
        return np.asarray((group_means(rest, self.factor) ** 2).sum(axis=0) / max(self.freedom, 1))


def balanced_intervals(fit: GenerationFit) -> BalancedIntervals:
    """Return the modified large-sample intervals of the components of *fit*.

    Parameters
    ----------
    fit
        One generation, or all pooled.

    Returns
    -------
    dict
        (component or ``total``, place) → estimate (not below zero) and 95 % limits of its variance there, in
        units of the response squared, half the loop width for ``sensor_by_direction``. Empty where the design
        is not balanced, surroundings are in the model, or a mean square has no degrees of freedom.
    """
    table = runs_of(fit)
    if not _is_plain(fit, table):
        return {}
    rows = tuple(_rows(fit, table))
    if not (_is_balanced(fit, table) and all(row.freedom >= 1 for row in rows)):
        return {}
    return {
        (name, place): interval
        for place, squares in _mean_squares(fit, table, rows)
        for name, interval in _intervals(squares)
    }


def _intervals(squares: MeanSquares) -> Iterator[tuple[str, VarianceInterval]]:
    for name in (*squares.names, "total"):
        found = squares.limits(squares.names if name == "total" else (name,))
        yield name, VarianceInterval(max(float(found.estimate), 0.0), float(found.low), float(found.high))


def _is_plain(fit: GenerationFit, table: RunTable) -> bool:
    """Whether all runs are alike, the fixed part is balanced too, and all lines are lines (or all means)."""
    model = fit.model
    width = table.design.shape[1]
    readings = len(table.order) // len(table.starts)
    lines = [c for c in fit.components if c.name in LINES]
    return (
        table.equal
        and readings > width
        and model.fixed.means
        and not model.covariates
        and bool(lines)
        and all((2 if c.line else 1) == width for c in lines)
        and any(c.name == "residual" for c in fit.components)
    )


def _code_of(table: RunTable, name: str) -> IntArray:
    """Codes of the units of component *name*, one a run."""
    if name == "repetition":
        return np.arange(len(table.starts))
    return table.units["shared_run" if name == "run" else name]


def _is_balanced(fit: GenerationFit, table: RunTable) -> bool:
    """Whether the units of every component have the same numbers of runs, shared ones of all sensors."""
    units, terms = table.units, fit.model.terms
    names = {"module", "sensor", *(name for name in terms if name in LINES)}
    sizes = {name: _unit_sizes(_code_of(table, name)) for name in names}
    if any(len(np.unique(size)) > 1 for size in sizes.values()):
        return False
    sensors_a_module = sizes["module"][0] // sizes["sensor"][0]
    if "run" in names and sizes["run"][0] != sensors_a_module:
        return False
    if "mounting" in names and len(_pairs(units["sensor"], units["mounting"])) != sensors_a_module * len(
        sizes["mounting"]
    ):
        return False
    if fit.model.counts.position_terms == 0:
        return True
    return all(
        len(_pairs(units["module"][own], units["place"][own]))
        == len(np.unique(units["module"][own])) * len(np.unique(units["place"][own]))
        for own in (units["generation"] == code for code in np.unique(units["generation"]))
    )


def _unit_sizes(code: IntArray) -> IntArray:
    return np.asarray(np.unique(code, return_counts=True)[1], dtype=np.int64)


def _pairs(first: IntArray, second: IntArray) -> IntArray:
    return np.unique(np.column_stack([first, second]), axis=0)


def _rows(fit: GenerationFit, table: RunTable) -> Iterator[_Row]:
    """The mean squares of run values, one a component."""
    terms, units = fit.model.terms, table.units
    nothing = np.zeros(len(table.starts), dtype=np.int64)
    place = units["place"] if fit.model.counts.position_terms else nothing

    def finest(*names: str) -> IntArray:
        return next((_code_of(table, name) for name in names if name in terms), nothing)

    group = units["batch"] if "batch" in terms else units["generation"]
    module = units["module"] if "module" in terms else group
    own = units["session"] if "session" in terms else units["sensor"]
    between = {
        "batch": (units["generation"], place),
        "module": (group, place),
        "mounting": (units["module"], nothing),
        "run": (units["mounting"] if "mounting" in terms else units["module"], nothing),
        "sensor": (module, place),
        "session": (units["sensor"], finest("mounting")),
        "repetition": (own, finest("run", "mounting")),
    }
    for name in terms:
        if name in LINES:
            yield _Row(name, _code_of(table, name), *between[name])


def _mean_squares(
    fit: GenerationFit, table: RunTable, rows: tuple[_Row, ...]
) -> Iterator[tuple[str, MeanSquares]]:
    """The mean squares at every place: of run values, and of readings about the lines of their runs."""
    response = fit.marginal[:, np.newaxis]
    lines = run_lines(table, response)
    rest = rest_of_runs(table, response, lines)
    about = tuple(_about_lines(fit, table, rest))
    names = (*(row.name for row in rows), *(name for name, *_ in about))
    freedom = np.array([*(row.freedom for row in rows), *(row[2] for row in about)], dtype=float)
    for place in PLACES:
        z = (fit.places[place] - fit.model.centre) / fit.model.scale
        at = np.array([1.0, z])[: table.design.shape[1]]
        values = np.einsum("d,ndr->nr", at, lines)
        squares = [*(float(row.square(values)[0]) for row in rows), *(square for _, square, _, _ in about)]
        expectations = _expectations(names, rows, table, table.weights @ at)
        for name, _, _, held in about:
            expectations[names.index(name), names.index(name)] = held
            expectations[names.index(name), -1] = 1.0
        yield place, MeanSquares(names, np.array(squares), freedom, expectations)


def _expectations(
    names: tuple[str, ...], rows: tuple[_Row, ...], table: RunTable, h: FloatArray
) -> FloatArray:
    """Expected mean squares of run values; *h* weighs the sorted readings of a run into its value."""
    runs = len(table.starts)
    size = {row.name: runs / len(np.unique(row.factor)) for row in rows}
    a_sensor = runs / len(np.unique(table.units["sensor"]))
    levels = table.run * (int(table.level.max()) + 1) + table.level
    beside_line = {
        "sensor_by_level": a_sensor * _sum_of_squares(h, levels) / runs,
        "sensor_by_direction": 4.0 * a_sensor * _sum_of_squares(h * table.branch, table.run) / runs,
        "residual": float(h @ h) / runs,
    }
    made = np.zeros((len(names), len(names)))
    for k, row in enumerate(rows):
        for j, name in enumerate(names):
            if name in size:
                made[k, j] = size[name] if name in _HOLDS[row.name] else 0.0
            elif name == "residual" or row.name in _ABOVE_SENSOR:
                made[k, j] = beside_line[name]
    return made


def _sum_of_squares(values: FloatArray, code: IntArray) -> float:
    """Sum over groups of the square of each group's sum."""
    return float((np.bincount(code, weights=values) ** 2).sum())


def _about_lines(
    fit: GenerationFit, table: RunTable, rest: FloatArray
) -> Iterator[tuple[str, float, int, float]]:
    """Name, mean square, degrees of freedom of what is left, and how often it holds its own component.

    Each also holds the residual once.
    """
    own = ("sensor_by_level", "sensor_by_direction")
    kept = [name for name in own if name in fit.model.terms]
    units, runs, width = table.units, len(table.starts), table.design.shape[1]
    sensor, generation = units["sensor"], units["generation"]
    sensors, generations = len(np.unique(sensor)), len(np.unique(generation))
    cells = len(rest) // runs
    if "sensor_by_level" in kept:
        yield ("sensor_by_level", *_level_square(table, rest, runs / sensors))
    if "sensor_by_direction" in kept:
        yield ("sensor_by_direction", *_direction_square(table, rest, runs / sensors))
    group, groups = (sensor, sensors) if kept else (generation, generations)
    noise = rest - group_means(rest, group[table.run] * (int(table.cell.max()) + 1) + table.cell)
    freedom = (runs - groups) * (cells - width)
    yield "residual", float((noise**2).sum()) / max(freedom, 1), freedom, 1.0


def _level_square(table: RunTable, rest: FloatArray, runs_a_sensor: float) -> tuple[float, int, float]:
    """Mean square of sensor × level beside the sensors' lines."""
    units, count = table.units, int(table.level.max()) + 1
    sensor, generation = units["sensor"][table.run], units["generation"][table.run]
    own = group_means(rest, sensor * count + table.level)
    common = group_means(own, generation * count + table.level)
    cells = len(rest) // len(table.starts)
    indicator = np.equal.outer(table.level[:cells], np.unique(table.level[:cells])).astype(float)
    hat = table.design[:cells] @ table.weights[:cells].T
    each = indicator.shape[1] - table.design.shape[1]
    held = (cells - float(np.einsum("ml,mn,nl->", indicator, hat, indicator))) / each
    sensors = len(np.unique(units["sensor"])) - len(np.unique(units["generation"]))
    freedom = sensors * each
    return float(((own - common) ** 2).sum()) / max(freedom, 1), freedom, runs_a_sensor * held


def _direction_square(table: RunTable, rest: FloatArray, runs_a_sensor: float) -> tuple[float, int, float]:
    """Mean square of the loop widths of sensors, each times the branch it is measured with."""
    units = table.units
    length = float((table.branch**2).sum()) / len(table.starts)
    width = np.add.reduceat(rest * table.branch[:, np.newaxis], table.starts) / length
    own = group_means(width, units["sensor"])
    common = group_means(own, units["generation"])
    freedom = len(np.unique(units["sensor"])) - len(np.unique(units["generation"]))
    square = length * float(((own - common) ** 2).sum()) / max(freedom, 1)
    return square, freedom, 4.0 * runs_a_sensor * length
