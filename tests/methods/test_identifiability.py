"""The ladder, case by case, and what must hold for every design."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.methods.identifiability import (
    Component,
    code_units,
    count_design,
    distinct_rows,
    label_of,
    ladder,
    two_way_rank,
)
from campaign.simulation.plan import RunKey, regular_plan
from campaign.simulation.readings import simulate_readings
from campaign.simulation.truth import Truth


def design(**plan: object) -> pd.DataFrame:
    return simulate_readings(regular_plan(**plan), Truth(), 1)


def components(readings: pd.DataFrame) -> dict[str, Component]:
    units = code_units(readings)
    return {c.name: c for c in ladder(count_design(readings, units))}


def test_usual_design_tells_every_level_apart() -> None:
    found = components(design(modules=6, sensors=5, repetitions=3, levels=8))
    freedoms = {name: found[name].degrees_of_freedom for name in ("module", "sensor", "repetition")}
    # modules − 1; sensors − modules − position terms = 30 − 6 − 4; runs − sensors = 90 − 30
    assert freedoms == {"module": 5, "sensor": 20, "repetition": 60}
    # after the lines of 90 runs, the means of 8 levels and 29 × 6 of sensor × level: 720 − 180 − 6 − 174
    assert found["residual"].degrees_of_freedom == 360
    assert found["sensor_by_level"].degrees_of_freedom == 29 * 6
    assert [found[n].label for n in ("module", "sensor", "repetition")] == ["weak", "resolved", "resolved"]
    assert all(found[name].line for name in freedoms)


def test_one_repetition_hides_in_the_sensor() -> None:
    found = components(design(repetitions=1))
    assert found["sensor"].called == "sensor + repetition"
    assert not found["repetition"].enters
    assert not found["sensor_by_level"].enters
    assert found["repetition"].label == "not identified"


def test_one_sensor_a_module() -> None:
    found = components(design(sensors=1))
    assert not found["module"].enters
    assert found["sensor"].called == "module + mounting + sensor"
    assert found["sensor"].degrees_of_freedom == 5


def test_one_module_a_generation_speaks_of_this_module_only() -> None:
    found = components(design(modules=1, generations=2))
    assert not found["module"].enters
    assert "this module only" in found["module"].reason
    assert found["sensor"].called == "sensor + position"


def test_two_levels_leave_the_run_an_intercept_only() -> None:
    found = components(design(levels=2))
    assert found["repetition"].enters
    assert not found["repetition"].line
    assert found["sensor"].line
    assert not found["sensor_by_level"].enters
    assert found["residual"].enters


def test_one_level_leaves_intercepts_only() -> None:
    found = components(design(levels=1))
    assert not any(found[name].line for name in ("module", "sensor", "repetition"))
    assert not found["repetition"].enters
    assert found["residual"].called == "repetition + residual"


def test_one_session_a_module_is_in_the_module() -> None:
    assert components(design())["module"].called == "module + mounting"
    assert components(design(sessions=2))["module"].called == "module"


def test_sessions_that_repeat_are_a_level() -> None:
    found = components(design(sessions=2))
    assert found["session"].enters
    assert found["session"].degrees_of_freedom == 30
    assert found["repetition"].degrees_of_freedom == 180 - 60


def test_one_run_a_session_is_session_and_repetition() -> None:
    found = components(design(sessions=3, repetitions=1))
    assert not found["session"].enters
    assert found["repetition"].called == "session + repetition"
    assert found["repetition"].degrees_of_freedom == 60


def test_batches_stand_between_generation_and_module() -> None:
    found = components(design(batches=3, generations=2))
    assert found["batch"].degrees_of_freedom == 4
    assert found["module"].degrees_of_freedom == 12 - 6
    single = components(design(batches=1))
    assert not single["batch"].enters
    assert "not between processes" in single["batch"].reason
    alone = components(design(batches=6))
    assert alone["module"].called == "batch + module + mounting"


def test_shared_runs_cross_with_sensors() -> None:
    found = components(design(shared_runs=True))
    assert found["run"].degrees_of_freedom == 18 - 6
    assert found["repetition"].called == "sensor × run"
    # 90 runs of sensors less sensors and shared runs within modules: 6 × (5 − 1) × (3 − 1)
    assert found["repetition"].degrees_of_freedom == 48


def test_both_branches_show_the_loops_of_sensors() -> None:
    assert components(design(descending=True))["sensor_by_direction"].degrees_of_freedom == 29
    assert not components(design())["sensor_by_direction"].enters


def test_sensors_that_keep_their_channel() -> None:
    readings = design(modules=3)
    number = readings.groupby(["module", "sensor"]).ngroup()
    kept = components(readings.assign(channel=number.astype(str)))
    assert kept["sensor"].called == "sensor + channel"
    by_place = components(readings.assign(channel=readings["position"]))
    assert by_place["sensor"].called == "sensor"


def test_positions_that_differ_in_every_module_are_no_factor() -> None:
    readings = design(modules=3)
    own = components(readings.assign(position=readings["module"] + readings["sensor"]))
    assert own["sensor"].called == "sensor + position"
    assert own["sensor"].degrees_of_freedom == 15 - 3


def test_counts_follow_the_design_and_not_the_files() -> None:
    gone = frozenset(RunKey("M01", "S1", "", repetition) for repetition in (1, 2, 3))
    found = components(design(omitted=gone))
    assert found["sensor"].degrees_of_freedom == 19
    assert found["repetition"].degrees_of_freedom == 58


@pytest.mark.parametrize(
    ("freedom", "label"),
    [(0, "not identified"), (1, "very weak"), (3, "very weak"), (4, "weak"), (9, "weak"), (10, "resolved")],
)
def test_labels(freedom: int, label: str) -> None:
    assert label_of(freedom) == label


@given(st.lists(st.tuples(st.integers(0, 5), st.integers(0, 4)), min_size=1, max_size=40))
def test_rank_of_two_factors_is_that_of_their_indicators(pairs: list[tuple[int, int]]) -> None:
    rows, columns = np.array(pairs, dtype=np.int64).T
    indicators = np.hstack([np.equal.outer(code, np.unique(code)).astype(float) for code in (rows, columns)])
    assert two_way_rank(rows, columns) == np.linalg.matrix_rank(indicators)


@settings(max_examples=60, deadline=None)
@given(
    modules=st.integers(1, 4),
    sensors=st.integers(1, 4),
    repetitions=st.integers(1, 3),
    levels=st.integers(1, 5),
    sessions=st.integers(0, 2),
    shared_runs=st.booleans(),
    descending=st.booleans(),
    batches=st.integers(0, 1),
)
def test_every_design_has_a_ladder_that_adds_up(**plan: int) -> None:
    readings = design(**plan)
    found = components(readings)
    entering = [c for c in found.values() if c.enters]
    assert all(c.degrees_of_freedom >= 1 for c in entering)
    assert all(c.degrees_of_freedom < len(readings) for c in entering)
    assert all(c.label == "not identified" for c in found.values() if not c.enters)
    assert all(c.reason for c in found.values())
    assert not any(c.line for c in entering if plan["levels"] == 1)


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 1000), keep=st.floats(0.5, 1.0))
def test_order_and_names_of_units_do_not_matter(seed: int, keep: float) -> None:
    readings = design(modules=3, sensors=3, repetitions=2, levels=3)
    rng = np.random.default_rng(seed)
    some = readings[rng.random(len(readings)) < keep]
    shuffled = some.sample(frac=1.0, random_state=seed)
    renamed = shuffled.assign(module="x" + shuffled["module"], trial="y" + shuffled["trial"])
    first, second = components(some), components(renamed)
    assert {n: c.degrees_of_freedom for n, c in first.items()} == {
        n: c.degrees_of_freedom for n, c in second.items()
    }


@settings(max_examples=50, deadline=None, derandomize=True)
@given(st.lists(st.tuples(*[st.integers(0, 5)] * 3), min_size=1, max_size=40))
def test_distinct_rows_are_those_that_numpy_finds(rows: list[tuple[int, int, int]]) -> None:
    table = np.array(rows, dtype=np.int64)
    found, own = distinct_rows(*table.T)
    theirs, inverse = np.unique(table, axis=0, return_inverse=True)
    assert (found == theirs).all()
    assert (own == inverse.ravel()).all()
