"""The facts of page 0: which effort is enough, sums over sensors, what the campaign held."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.analyses.findings import (
    SpreadFinding,
    SpreadSource,
    badly_straight,
    choose_effort,
    sum_up,
)
from campaign.analyses.scope import describe_scope
from tests.pages.small_campaign import Sketch, read_and_calibrate, write_campaign


def efforts(**expanded):
    rows = [
        {
            "generation": "g",
            "effort": effort,
            "strain_sd_predicted": value / 2,
            "strain_sd_left_out": math.nan,
            "strain_expanded": value,
            "factor": value / expanded["sensor"],
        }
        for effort, value in expanded.items()
    ]
    return pd.DataFrame(rows)


def test_least_effort_that_keeps_the_limit_is_enough():
    table = efforts(all=0.5, generation=0.3, position=0.019, sensor=0.015)
    fact = choose_effort("g", table, 0.02)
    assert fact.enough.effort == "position"
    assert fact.sparing.effort == "position"
    assert fact.own.strain_expanded == 0.015


def test_where_not_even_the_own_line_keeps_the_limit_nothing_is_enough():
    fact = choose_effort("g", efforts(all=0.5, sensor=0.03), 0.02)
    assert fact.enough is None


def test_without_a_limit_a_tenth_more_error_is_still_enough():
    fact = choose_effort("g", efforts(all=0.5, generation=0.0109, sensor=0.01), math.nan)
    assert fact.enough.effort == "generation"
    fact = choose_effort("g", efforts(all=0.5, generation=0.0112, sensor=0.01), math.nan)
    assert fact.enough.effort == "sensor"


def test_one_sensor_has_no_lesser_effort():
    fact = choose_effort("g", efforts(sensor=0.01), math.nan)
    assert fact.sparing is None
    assert choose_effort("g", efforts(sensor=0.01).assign(effort="all"), math.nan) is None


def test_mean_counts_modules_and_not_sensors():
    figures = pd.DataFrame(
        {
            "generation": "g",
            "module": ["a"] * 8 + ["b", "c"],
            "sensor": [*"12345678", "1", "1"],
            "value": [1.0] * 8 + [2.0, 6.0],
        }
    )
    (fact,) = sum_up(figures, 1.5)
    reach = stats.t.ppf(0.975, 2) * np.std([1, 2, 6], ddof=1) / math.sqrt(3)
    assert fact.mean == pytest.approx(3.0)
    assert fact.high == pytest.approx(3.0 + reach)
    assert fact.low == 0.0
    assert (fact.exceeding, fact.worst.module, fact.worst.value) == (2, "c", 6.0)


def test_one_module_has_no_interval_and_putting_back_nothing_is_not_shown():
    figures = pd.DataFrame({"generation": "g", "module": "a", "sensor": ["1", "2"], "value": [1.0, 2.0]})
    (fact,) = sum_up(figures, math.nan, figures)
    assert math.isnan(fact.low)
    assert math.isnan(fact.put_back)
    more = pd.concat(
        [figures, pd.DataFrame([{"generation": "g", "module": "a", "sensor": "3", "value": 9.0}])]
    )
    assert sum_up(figures, math.nan, more)[0].put_back == pytest.approx(4.0)


def test_scope_counts_what_was_used_and_names_what_was_not(tmp_path):
    sketch = Sketch(set_aside="M2 BC")
    folder = write_campaign(tmp_path / "c", sketch)
    with (folder / "sensors.csv").open("a") as register:
        register.write('"M2","DEAD",60 mm,dead before testing,open electrode\n')
    intake, calibration = read_and_calibrate(folder)
    scope = describe_scope(intake.description, intake, calibration)
    assert (scope.generations, scope.modules, scope.sensors, scope.batches) == (2, 6, 11, 0)
    assert (scope.mountings.low, scope.mountings.high) == (2, 2)
    assert (scope.runs.low, scope.runs.high) == (4, 4)
    assert (scope.x.low, scope.x.high) == (pytest.approx(0.0), pytest.approx(0.4))
    assert [(e.module, e.sensor, e.reason) for e in scope.set_aside] == [("M2", "BC", "torn")]
    assert [(e.module, e.sensor, e.reason) for e in scope.failed_before_testing] == [
        ("M2", "DEAD", "open electrode")
    ]
    assert scope.temperature_c is None
    assert "cyclic" in scope.not_measured
    assert "staircase" not in scope.not_measured


def test_kinds_that_nothing_analyses_yet_are_counted_by_file(monkeypatch):
    monkeypatch.setattr("campaign.analyses.scope.ANALYSED", ("staircase", "cyclic"))
    trials = pd.DataFrame(
        {
            "file": ["a.csv", "a.csv", "b.csv", "c.csv"],
            "kind": ["layout", "layout", "layout", "cyclic"],
            "fate": ["used", "used", "used", "set aside"],
            "generation": "g",
            "batch": "",
            "module": "M",
            "sensor": ["1", "2", "1", "1"],
            "session": "",
            "started": "",
        }
    )
    nothing = pd.DataFrame(columns=["module", "sensor"])
    intake = SimpleNamespace(trials=trials, modules=nothing, sensors=nothing, sessions=nothing)
    description = SimpleNamespace(title="t", simulated=False, rehearsal=False, first_day="", last_day="")
    scope = describe_scope(description, intake, None)
    assert scope.not_analysed == (("layout", 2),)
    assert scope.x is None
    assert scope.first_day == ""


def with_limits(table: pd.DataFrame, share: float) -> pd.DataFrame:
    """*table* with 95 % limits of the SD that share part below and above it."""
    sd = table["strain_sd_predicted"]
    return table.assign(low=sd * (1 - share), high=sd * (1 + share))


def test_a_line_for_every_sensor_is_needed_only_where_intervals_say_so():
    table = efforts(generation=0.025, sensor=0.015)
    sharp = choose_effort("g", with_limits(table, 0.1), 0.02)
    vague = choose_effort("g", with_limits(table, 0.3), 0.02)
    assert sharp.enough.effort == vague.enough.effort == "sensor"
    assert (sharp.spares_decided, vague.spares_decided) == (True, False)
    assert sharp.sparing.keeps(0.02) == "not kept"
    assert vague.sparing.keeps(0.02) == "not decided"
    assert sharp.own.expanded_high == pytest.approx(0.0165)
    assert (sharp.enough_decided, with_wide_own(table).enough_decided) == (True, False)


def with_wide_own(table: pd.DataFrame):
    return choose_effort("g", with_limits(table, 0.4), 0.02)


def test_without_a_limit_the_intervals_of_both_must_be_a_tenth_apart():
    table = efforts(generation=0.02, sensor=0.01)
    assert choose_effort("g", with_limits(table, 0.1), math.nan).spares_decided
    assert not choose_effort("g", with_limits(table, 0.4), math.nan).spares_decided


def test_one_sensor_says_nothing_of_sparing_lines():
    assert not choose_effort("g", with_limits(efforts(sensor=0.01), 0.1), math.nan).spares_decided


def test_no_effort_keeps_the_limit_beyond_doubt_only_where_the_best_exceeds_it():
    table = efforts(generation=0.05, sensor=0.03)
    assert choose_effort("g", with_limits(table, 0.1), 0.02).none_decided
    assert not choose_effort("g", with_limits(table, 0.5), 0.02).none_decided


def test_what_may_spread_as_much_is_named():
    def source(called: str, sd: float, high: float) -> SpreadSource:
        return SpreadSource(called, called, sd, math.nan, high, math.nan)

    sources = (source("sensor", 2.0, 3.0), source("module", 1.0, 4.0), source("run", 0.1, 0.2))
    limited = (source("batch", math.nan, 9.0), source("session", math.nan, 0.5))
    assert SpreadFinding("g", "mid", sources, ("run",), limited).rivals == ("module", "batch")


def test_a_bent_sensor_leads_the_findings():
    figures = pd.DataFrame(
        {"generation": ["a", "b"], "module": "m", "sensor": ["1", "2"], "value": [1.0, 31.0]}
    )
    assert badly_straight(sum_up(figures, math.nan))
    assert not badly_straight(sum_up(figures.head(1), math.nan))
