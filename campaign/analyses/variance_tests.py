"""Tests of what is in a nested model: of each component, and of each group of fixed columns."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.run_settling import Settling
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.component_tests import (
    ComponentTest,
    RunTable,
    Strata,
    compare_components,
    compare_positions,
    tabulate_runs,
)
from campaign.methods.holm import holm_adjusted
from campaign.methods.nested_model import NestedModel, fit_nested_model
from campaign.methods.nested_simulation import simulate_deviations

FloatArray = npt.NDArray[np.float64]

TEST_COLUMNS = ("generation", "component", "test", "statistic", "df1", "df2", "p", "p_adjusted")
"""Columns of the table of tests; df1 and df2 are NaN for a bootstrapped ratio."""

_GROUPS = {"direction": "direction", "covariate": "surroundings"}


def runs_of(fit: GenerationFit) -> RunTable:
    """Return the runs of a fit, with lines where its runs have three levels or more."""
    model = fit.model
    z = (model.readings["x"].to_numpy(float) - model.centre) / model.scale
    return tabulate_runs(model.units, z, line=model.counts.run_levels >= 3)


def test_table(
    fits: tuple[GenerationFit, ...],
    components: Mapping[str, Iterable[ComponentTest]],
    settling: Mapping[str, Settling],
) -> pd.DataFrame:
    """Test the components and the fixed groups of every fit.

    Parameters
    ----------
    fits
        One a generation; the pooled fit is not tested again.
    components
        The tests of the components, by generation (:func:`component_tests_of`).
    settling
        The test of the run number, by generation.

    Returns
    -------
    pandas.DataFrame
        Columns of :data:`TEST_COLUMNS`; Holm's correction (1979) runs over the tests of a generation.
    """
    parts = [_of_generation(fit, components[fit.generation], settling.get(fit.generation)) for fit in fits]
    kept = [part for part in parts if len(part)]
    if not kept:
        return pd.DataFrame(columns=list(TEST_COLUMNS))
    return pd.concat(kept, ignore_index=True)[list(TEST_COLUMNS)]


test_table.__test__ = False  # type: ignore[attr-defined]  # its name is not that of a test case


def _of_generation(
    fit: GenerationFit, components: Iterable[ComponentTest], settling: Settling | None
) -> pd.DataFrame:
    rows = [_component_row(test) for test in components]
    rows += [row for group in _GROUPS if (row := _fixed_row(fit, group)) is not None]
    if settling is not None and np.isfinite(settling.p):
        rows.append(_row("run number", "exact F", settling.statistic, settling.p, (np.nan, np.nan)))
    frame = pd.DataFrame(rows)
    if frame.empty:
        return frame
    adjusted = holm_adjusted(frame["p"].to_numpy(float))
    return frame.assign(generation=fit.generation, p_adjusted=adjusted)


def component_tests_of(fit: GenerationFit, seed: int) -> tuple[ComponentTest, ...]:
    """Return the test of every component of *fit*; bootstraps draw from the model without it."""
    generator = np.random.default_rng(seed)

    def draw(name: str, replicates: int) -> FloatArray:
        null, covariances, residual = _without(fit, name)
        return simulate_deviations(null, covariances, residual, replicates, generator)

    strata = Strata(fit.model.terms, fit.model.counts.shared, fit.model.counts.position_terms > 0)
    table = runs_of(fit)
    columns = fit.model.fixed.of_group("position")
    kept = fit.marginal + fit.model.fixed.columns[:, columns] @ fit.fit.coefficients[columns]
    position = compare_positions(table, strata, kept, draw)
    return (
        *compare_components(table, strata, fit.marginal, draw),
        *(() if position is None else (position,)),
    )


def _without(fit: GenerationFit, name: str) -> tuple[NestedModel, Mapping[str, FloatArray], float]:
    """The model without a component, with the covariances of what remains.

    A ratio of two spreads hardly depends on these: they are kept. A spread over the sum of two others depends
    on them, so that there the model is fitted again.
    """
    model = fit.model.model
    terms = tuple(term for term in model.terms if term.name != name)
    used = {term.level for term in terms}
    smaller = replace(model, terms=terms, levels=tuple(level for level in model.levels if level[0] in used))
    if fit.model.counts.shared and name in ("module", "mounting"):
        null = fit_nested_model(smaller)
        return smaller, null.covariances, null.residual_variance
    return smaller, fit.fit.covariances, fit.residual_variance


def _component_row(test: ComponentTest) -> dict[str, object]:
    return _row(test.component, test.kind, test.statistic, test.p, test.degrees_of_freedom)


def _row(
    component: str, test: str, statistic: float, p: float, freedom: tuple[float, float]
) -> dict[str, object]:
    df1, df2 = (value if value > 0 else np.nan for value in freedom)
    return {"component": component, "test": test, "statistic": statistic, "df1": df1, "df2": df2, "p": p}


def _fixed_row(fit: GenerationFit, group: str) -> dict[str, object] | None:
    """Wald's F of a group of fixed columns, on the degrees of freedom of the units that carry it."""
    columns = fit.model.fixed.of_group(group)
    counts = fit.model.counts
    below = {
        "direction": counts.direction_freedom or counts.residual_freedom,
        "covariate": max(counts.mountings - counts.generations - 1, 1),
    }[group]
    if not len(columns) or below < 1:
        return None
    estimate = fit.fit.coefficients[columns]
    covariance = fit.fit.coefficient_covariance[np.ix_(columns, columns)]
    statistic = float(estimate @ np.linalg.solve(covariance, estimate)) / len(columns)
    p = float(stats.f.sf(statistic, len(columns), below))
    return _row(_GROUPS[group], "F (Wald)", statistic, p, (float(len(columns)), float(below)))
