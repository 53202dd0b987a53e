"""Tests of components keep their level and find what is there."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.methods.component_tests import (
    ComponentTest,
    RunTable,
    Strata,
    compare_components,
    spreads,
    tabulate_runs,
    wilks,
)
from campaign.methods.identifiability import code_units
from campaign.simulation.plan import RunKey, regular_plan
from campaign.simulation.readings import simulate_readings
from campaign.simulation.truth import Components, GenerationTruth, LineSpread, Truth

TERMS = ("module", "sensor", "repetition", "sensor_by_level")


def truth(**components: object) -> Truth:
    return Truth(generations=(GenerationTruth(components=Components(**components)),))


def nothing_to_draw(_name: str, _replicates: int) -> np.ndarray:
    raise AssertionError("an exact test draws nothing")


def run_tests(readings: pd.DataFrame, terms: tuple[str, ...] = TERMS) -> dict[str, ComponentTest]:
    return compared(runs_of(readings), readings["signal"].to_numpy(), terms)


def runs_of(readings: pd.DataFrame) -> RunTable:
    return tabulate_runs(code_units(readings), readings["x"].to_numpy(), line=True)


def compared(table: RunTable, signal: np.ndarray, terms: tuple[str, ...]) -> dict[str, ComponentTest]:
    strata = Strata(terms, shared=False, positions=True)
    return {t.component: t for t in compare_components(table, strata, signal, nothing_to_draw)}


def p_values(truth_of: Truth, name: str, campaigns: int) -> np.ndarray:
    design = regular_plan(modules=4, sensors=3, repetitions=3, levels=5)
    table = runs_of(simulate_readings(design, truth_of, 0))
    signals = [simulate_readings(design, truth_of, s)["signal"].to_numpy() for s in range(campaigns)]
    return np.array([compared(table, signal, (name,))[name].p for signal in signals])


WITHOUT = {
    "module": {"sensor": LineSpread(0.5, 1.0, 0.3), "repetition": LineSpread(0.2, 0.3)},
    "sensor": {"module": LineSpread(0.5, 1.0, 0.3), "repetition": LineSpread(0.2, 0.3)},
    "repetition": {"module": LineSpread(0.5, 1.0, 0.3), "sensor": LineSpread(0.5, 0.2)},
    "sensor_by_level": {"sensor": LineSpread(0.5, 0.2), "repetition": LineSpread(0.2, 0.3)},
}


@pytest.mark.parametrize("name", list(WITHOUT))
def test_exact_tests_are_uniform_where_nothing_is_there(name: str) -> None:
    found = p_values(truth(**WITHOUT[name]), name, 120)
    assert stats.kstest(found, "uniform").pvalue > 0.001


@pytest.mark.parametrize("name", ["module", "sensor", "repetition"])
def test_what_is_there_is_found(name: str) -> None:
    there = truth(**WITHOUT[name], **{name: LineSpread(3.0, 5.0)})
    assert np.mean(p_values(there, name, 20) < 0.05) > 0.9


def test_missing_sensors_leave_tests_exact_and_missing_runs_do_not() -> None:
    sensor_gone = frozenset(RunKey("M01", "S1", "", r) for r in (1, 2, 3))
    readings = simulate_readings(regular_plan(omitted=sensor_gone), truth(), 1)
    assert {t.kind for t in run_tests(readings).values()} == {"exact F"}
    one_run = simulate_readings(regular_plan(omitted=frozenset([RunKey("M01", "S1", "", 1)])), truth(), 1)
    with pytest.raises(AssertionError, match="draws nothing"):
        run_tests(one_run)


def test_bootstrap_agrees_with_the_exact_f() -> None:
    readings = simulate_readings(regular_plan(), truth(**WITHOUT["module"]), 4)
    exact = run_tests(readings, ("module",))["module"]
    unequal = readings.drop(readings.index[readings["module"].eq("M01") & readings["repetition"].eq(3)])
    table = runs_of(unequal)
    line = np.column_stack([np.ones(len(unequal)), unequal["x"]])
    generator = np.random.default_rng(5)
    own = code_units(unequal)

    def draw(_name: str, replicates: int) -> np.ndarray:
        drawn = 0.1 * generator.normal(size=(len(unequal), replicates))
        for code, spread in ((own.sensor, (0.5, 1.0)), (own.run, (0.2, 0.3))):
            effects = generator.normal(size=(code.max() + 1, 2, replicates)) * np.array(spread)[:, None]
            drawn += np.einsum("nd,ndr->nr", line, effects[code])
        return drawn

    strata = Strata(("module",), shared=False, positions=True)
    (test,) = compare_components(table, strata, unequal["signal"].to_numpy(), draw)
    assert test.kind == "parametric bootstrap"
    assert test.p == pytest.approx(exact.p, abs=0.1)


def test_wilks_of_one_value_is_the_analysis_of_variance() -> None:
    generator = np.random.default_rng(0)
    group = np.repeat(np.arange(4), 5)
    values = generator.normal(size=20) + 0.5 * group
    statistic, freedom = wilks(*spreads(values[:, None, None], [np.zeros(20, dtype=np.int64)], group))
    assert freedom == (3.0, 16.0)
    assert statistic[0] == pytest.approx(stats.f_oneway(*values.reshape(4, 5)).statistic)


def test_wilks_of_two_values_is_invariant() -> None:
    generator = np.random.default_rng(1)
    group = np.repeat(np.arange(5), 6)
    values = generator.normal(size=(30, 2, 1))
    turned = np.einsum("ij,njr->nir", np.array([[2.0, 1.0], [0.3, -4.0]]), values) + 7.0
    base = [np.zeros(30, dtype=np.int64)]
    assert wilks(*spreads(turned, base, group))[0][0] == pytest.approx(
        wilks(*spreads(values, base, group))[0][0]
    )
