"""From readings to the nested model: which columns are fixed, which effects are random, and why.

The fixed part is level means per generation where nominal levels are common (a curvature that all sensors
share would otherwise leak into residual and repetition), else a polynomial; positions carry their own line
per generation, branches their own level means. The random lines ride on top. Which of them enter is decided
by the design alone (:mod:`campaign.methods.identifiability`), never by a test.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.methods.identifiability import (
    Component,
    DesignCounts,
    Units,
    code_units,
    count_design,
    distinct_rows,
    ladder,
)
from campaign.methods.nested_model import NestedModel, RandomTerm

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

MOST_LEVELS = 60
"""More nominal levels than this are a sweep: a polynomial takes the place of means."""

LEAST_TEMPERATURE_RANGE_K, LEAST_HUMIDITY_RANGE_PERCENT = 0.5, 2.0
"""A covariate that moved less than this over the campaign is a constant."""

_COVARIATES = (
    ("temperature", "temperature_c", LEAST_TEMPERATURE_RANGE_K),
    ("humidity", "humidity_percent", LEAST_HUMIDITY_RANGE_PERCENT),
)
_LEVEL_OF_TERM = {
    "batch": "batch",
    "module": "module",
    "mounting": "module",
    "run": "module",
    "sensor": "sensor",
    "session": "session",
    "repetition": "repetition",
    "sensor_by_level": "sensor",
    "sensor_by_direction": "sensor",
}


@dataclass(frozen=True)
class FixedPart:
    """Columns of the fixed part.

    Attributes
    ----------
    columns
        Shape (readings, coefficients), of full column rank.
    names
        One a column, in words.
    groups
        What each column belongs to: ``level``, ``polynomial``, ``direction``, ``position``, ``covariate`` or
        ``departure``.
    means
        Whether level means are fitted; ``False``: a polynomial.
    """

    columns: FloatArray
    names: tuple[str, ...]
    groups: tuple[str, ...]
    means: bool

    def of_group(self, group: str) -> IntArray:
        """Return the numbers of the columns of *group*."""
        return np.array([k for k, g in enumerate(self.groups) if g == group], dtype=np.int64)


@dataclass(frozen=True)
class VarianceModel:
    """One nested model, ready to be fitted.

    Attributes
    ----------
    generation
        Name of the generation, or ``"all"``.
    readings
        The rows that are fitted, with the index of the campaign's table of readings.
    response
        Shape (readings,): signal, or its ratio to the session's zero signal.
    units, counts, components
        Codes of units, their numbers, and what the design can tell apart.
    fixed
        The fixed part.
    centre, scale
        The random lines and the positions' lines run in z = (x − centre)/scale.
    model
        What the engine takes.
    covariates
        Name → (mean, lowest, highest) of the surroundings that entered.
    """

    generation: str
    readings: pd.DataFrame
    response: FloatArray
    units: Units
    counts: DesignCounts
    components: tuple[Component, ...]
    fixed: FixedPart
    centre: float
    scale: float
    model: NestedModel
    covariates: dict[str, tuple[float, float, float]]

    @property
    def terms(self) -> tuple[str, ...]:
        """Names of the random terms, in the order of the model."""
        return tuple(term.name for term in self.model.terms)

    def component(self, name: str) -> Component:
        """Return the component *name* of the ladder."""
        return next(c for c in self.components if c.name == name)

    def direction(self, name: str, x: float) -> FloatArray:
        """Return the weights whose product with an effect of term *name* is its value at *x*, shape (d,)."""
        width = next(term.columns.shape[1] for term in self.model.terms if term.name == name)
        return np.array([1.0, (x - self.centre) / self.scale])[:width]


def build_model(readings: pd.DataFrame, response: FloatArray, generation: str) -> VarianceModel:
    """Return the model of *response* over *readings*.

    Parameters
    ----------
    readings
        Used readings of one generation, or of all, with the columns of the table of readings.
    response
        Shape (readings,), in units of the signal or as a ratio.
    generation
        Its name, or ``"all"``.
    """
    units = code_units(readings)
    counts = count_design(readings, units)
    components = ladder(counts)
    x = readings["x"].to_numpy(float)
    centre, scale = _centre_and_scale(x)
    z = (x - centre) / scale
    covariates = _moving_covariates(readings)
    fixed = _fixed_part(readings, units, counts, z, tuple(covariates))
    model = NestedModel(
        response=response,
        fixed=fixed.columns,
        fixed_names=fixed.names,
        levels=_levels(units, components),
        terms=tuple(_terms(units, components, z)),
    )
    return VarianceModel(
        generation, readings, response, units, counts, components, fixed, centre, scale, model, covariates
    )


def _centre_and_scale(x: FloatArray) -> tuple[float, float]:
    half = float(np.ptp(x)) / 2
    return float(x.min()) + half, half if half > 0 else 1.0


def _levels(units: Units, components: tuple[Component, ...]) -> tuple[tuple[str, IntArray], ...]:
    """The nested grouping levels that some term lives on, outermost first."""
    wanted = {_LEVEL_OF_TERM[c.name] for c in components if c.enters and c.name in _LEVEL_OF_TERM}
    codes = {
        "batch": units.batch,
        "module": units.module,
        "sensor": units.sensor,
        "session": units.session,
        "repetition": units.run,
    }
    return tuple((name, code) for name, code in codes.items() if name in wanted)


def _terms(units: Units, components: tuple[Component, ...], z: FloatArray) -> Iterator[RandomTerm]:
    line = np.column_stack([np.ones_like(z), z])
    copies = {
        "mounting": _within(units.module, units.mounting),
        "run": _within(units.module, units.shared_run),
        "sensor_by_level": _within(units.sensor, units.level),
    }
    for component in components:
        if not component.enters or component.name == "residual":
            continue
        columns = line if component.line else line[:, :1]
        if component.name == "sensor_by_direction":
            columns = units.branch[:, np.newaxis]
        yield RandomTerm(component.name, _LEVEL_OF_TERM[component.name], columns, copies.get(component.name))


def _within(outer: IntArray, inner: IntArray) -> IntArray:
    """Number the units of *inner* from 0 within each unit of *outer*."""
    pairs, own = distinct_rows(outer, inner)
    first = np.searchsorted(pairs[:, 0], pairs[:, 0])
    return np.asarray((np.arange(len(pairs)) - first)[own], dtype=np.int64)


def has_both_branches(readings: pd.DataFrame) -> bool:
    """Return whether rising and falling readings are among *readings*."""
    return {"rising", "falling"} <= set(readings["direction"])


def _fixed_part(
    readings: pd.DataFrame, units: Units, counts: DesignCounts, z: FloatArray, covariates: tuple[str, ...]
) -> FixedPart:
    means = levels_are_common(readings, units)
    parts = list(_level_means(readings, units) if means else _polynomials(readings, units, z))
    parts += _position_lines(readings, counts, z)
    parts += _covariate_columns(readings, covariates)
    if means:
        parts += _departure(units, z)
    columns = np.column_stack([column for _, _, column in parts])
    kept = independent_columns(columns)
    return FixedPart(
        columns=columns[:, kept],
        names=tuple(parts[k][0] for k in kept),
        groups=tuple(parts[k][1] for k in kept),
        means=means,
    )


_Columns = Iterator[tuple[str, str, FloatArray]]


def levels_are_common(readings: pd.DataFrame, units: Units) -> bool:
    """Return whether every reading has a nominal level, and every level half of its generation's sensors."""
    if readings["nominal_level"].isna().any() or readings["nominal_level"].nunique() > MOST_LEVELS:
        return False
    cells = distinct_rows(units.generation, units.level, units.sensor)[0]
    _, visitors = np.unique(cells[:, :2], axis=0, return_counts=True)
    generation = np.unique(cells[:, :2], axis=0)[:, 0]
    sensors = np.bincount(np.unique(cells[:, [0, 2]], axis=0)[:, 0])
    return bool(np.all(visitors >= 0.5 * sensors[generation]))


def _level_means(readings: pd.DataFrame, units: Units) -> _Columns:
    """Mean of both branches at every level of a generation, and the difference between them."""
    generations = readings["generation"].to_numpy()
    both = has_both_branches(readings)
    for name in np.unique(generations):
        own = generations == name
        for level in np.unique(readings["nominal_level"].to_numpy(float)[own]):
            cell = own & (readings["nominal_level"].to_numpy(float) == level)
            yield f"{name}: level {level:g}", "level", cell.astype(float)
            if both and len(np.unique(units.branch[cell])) > 1:
                yield (
                    f"{name}: falling − rising at level {level:g}",
                    "direction",
                    np.where(cell, units.branch, 0.0),
                )


def _polynomials(readings: pd.DataFrame, units: Units, z: FloatArray) -> _Columns:
    """A cubic a generation at most, and a parabola of the difference between branches."""
    generations = readings["generation"].to_numpy()
    both = has_both_branches(readings)
    for name in np.unique(generations):
        own = generations == name
        degree = min(3, max(int(np.median(_levels_a_run(units, own))) - 1, 0))
        for power in range(degree + 1):
            yield f"{name}: x to the power {power}", "polynomial", np.where(own, z**power, 0.0)
        for power in range(min(degree, 2) + 1) if both else ():
            column = np.where(own, units.branch * z**power, 0.0)
            yield f"{name}: falling − rising, x to the power {power}", "direction", column


def _levels_a_run(units: Units, rows: npt.NDArray[np.bool_]) -> IntArray:
    pairs = distinct_rows(units.run[rows], units.level[rows])[0]
    return np.asarray(np.unique(pairs[:, 0], return_counts=True)[1], dtype=np.int64)


def _position_lines(readings: pd.DataFrame, counts: DesignCounts, z: FloatArray) -> _Columns:
    """A line per generation × position, coded to sum to zero over the positions of a generation."""
    if counts.position_terms == 0:
        return
    generations, positions = readings["generation"].to_numpy(), readings["position"].to_numpy()
    for name in np.unique(generations):
        own = generations == name
        places = np.unique(positions[own])
        last = own & (positions == places[-1])
        for place in places[:-1]:
            column = (own & (positions == place)).astype(float) - last
            yield f"{name}: position {place}, intercept", "position", column
            if counts.run_levels >= 2:
                yield f"{name}: position {place}, slope", "position", column * z


def _moving_covariates(readings: pd.DataFrame) -> dict[str, tuple[float, float, float]]:
    moving = {}
    for name, column, least in _COVARIATES:
        values = readings[column].to_numpy(float)
        if np.isfinite(values).all() and np.ptp(values) > least:
            moving[name] = (float(values.mean()), float(values.min()), float(values.max()))
    return moving


def _covariate_columns(readings: pd.DataFrame, names: tuple[str, ...]) -> _Columns:
    for name, column, _ in _COVARIATES:
        if name in names:
            values = readings[column].to_numpy(float)
            yield name, "covariate", values - values.mean()


def _departure(units: Units, z: FloatArray) -> _Columns:
    """A scaled column for the distance from the level, where the stand did not stop exactly there."""
    cells = distinct_rows(units.generation, units.level, units.direction)[1]
    away = z - (np.bincount(cells, z) / np.bincount(cells))[cells]
    if np.abs(away).max() > 1e-6:
        yield "distance from the level", "departure", away / np.abs(away).max()


def independent_columns(columns: FloatArray) -> list[int]:
    """Return the numbers of the columns that do not depend linearly on the ones before them."""
    norms = np.linalg.norm(columns, axis=0)
    scaled = columns / np.where(norms > 0, norms, 1.0)
    try:
        diagonal = np.diag(np.linalg.cholesky(scaled.T @ scaled))
    except np.linalg.LinAlgError:
        return _independent_one_by_one(scaled)
    if diagonal.min() > 1e-4:
        return list(range(columns.shape[1]))
    return _independent_one_by_one(scaled)


def _independent_one_by_one(columns: FloatArray) -> list[int]:
    """Gram–Schmidt, twice a column: the diagonal of one QR is not to be trusted past the first dependence."""
    kept: list[int] = []
    basis = np.zeros((columns.shape[0], 0))
    for k, column in enumerate(columns.T):
        rest = column - basis @ (basis.T @ column)
        rest = rest - basis @ (basis.T @ rest)
        length = float(np.linalg.norm(rest))
        if length > 1e-8:
            kept.append(k)
            basis = np.column_stack([basis, rest / length])
    return kept
