"""Staircases as logs over time and as tables, reduced to readings."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.plateaus import find_plateaus
from campaign.trials.staircase import (
    plateau_directions,
    readings_of_staircase,
    zero_return,
)

HOSTILE = Path(__file__).parents[1] / "campaigns" / "hostile" / "recordings"
UP_AND_DOWN = [0.0, 4.0, 8.0, 12.0, 16.0, 20.0, 16.0, 12.0, 8.0, 4.0, 0.0]
REST = 50.0


def staircase_log(levels, dwells, *, rate=10.0, speed=5.0, noise=0.0, rng=None):
    """Time (s), reference (mm) and the plateau each sample belongs to (−1 on ramps)."""
    parts, owner = [np.full(int(dwells[0] * rate), levels[0])], [np.zeros(int(dwells[0] * rate))]
    for number in range(1, len(levels)):
        ramp = int(abs(levels[number] - levels[number - 1]) / speed * rate)
        parts += [np.linspace(levels[number - 1], levels[number], ramp + 2)[1:-1]]
        parts += [np.full(int(dwells[number] * rate), levels[number])]
        owner += [np.full(ramp, -1.0), np.full(int(dwells[number] * rate), float(number))]
    reference = np.concatenate(parts)
    if noise:
        reference = reference + noise * rng.normal(0.0, 1.0, len(reference))
    return np.arange(len(reference)) / rate, reference, np.concatenate(owner)


def trial_of(elongation, signal, time=None, **more) -> Trial:
    identity = TrialIdentity(
        "trials/a.csv", "staircase", "one", "", "M1", "S1", "AB", 1, "s1", "2026-01-02", "", REST, 0.1
    )
    return Trial(
        identity,
        signal,
        "pF",
        time_s=time,
        elongation_mm=elongation,
        length_mm=REST + elongation,
        strain=elongation / REST,
        reference=more.pop("reference", "elongation"),
        **more,
    )


staircases = st.tuples(
    st.integers(0, 2**32 - 1),
    st.integers(2, 9),
    st.booleans(),
    st.sampled_from([5.0, 10.0, 50.0]),
    st.sampled_from([1.0, 5.0, 100.0]),
    st.sampled_from([0.0, 0.01, 0.05, 0.1]),
    st.sampled_from([0.0, 0.01, 0.1]),
)


@settings(max_examples=150, deadline=None)
@given(staircases)
def test_plateaus_of_simulated_staircases_are_recovered(case):
    """Noise up to 1/30 of a step, slow to instant ramps, dwells that differ fourfold, rounded or not."""
    seed, steps, down, rate, speed, noise, rounding = case
    rng = np.random.default_rng(seed)
    levels = list(3.0 * np.arange(steps + 1))
    levels += levels[-2::-1] if down else []
    dwells = rng.uniform(4.0, 16.0, len(levels))
    _, reference, owner = staircase_log(levels, dwells, rate=rate, speed=speed, noise=noise, rng=rng)
    reference = np.round(reference / rounding) * rounding if rounding else reference
    starts, stops = find_plateaus(60.0 + reference)
    assert len(starts) == len(levels)
    slack = 5 + int(rate)  # a lone excursion of the noise may end a plateau a little early
    for number, (start, stop) in enumerate(zip(starts, stops, strict=True)):
        inside = np.flatnonzero(owner == number)
        assert abs(start - inside[0]) <= slack
        assert abs(stop - 1 - inside[-1]) <= slack
        assert np.median(reference[start:stop]) == pytest.approx(levels[number], abs=0.15)


@pytest.mark.parametrize("levels", [[0.0, 20.0, 4.0, 16.0, 8.0, 12.0], [0.0, 5.0, 10.0, 15.0, 0.0]])
def test_levels_in_any_order_and_a_long_way_back(levels):
    _, reference, _ = staircase_log(
        levels, [8.0] * len(levels), speed=2.0, noise=0.02, rng=np.random.default_rng(1)
    )
    starts, stops = find_plateaus(reference)
    assert [round(float(np.median(reference[a:b]))) for a, b in zip(starts, stops, strict=True)] == levels


def test_an_offset_of_the_reference_changes_nothing():
    _, reference, _ = staircase_log(UP_AND_DOWN, [6.0] * 11, noise=0.02, rng=np.random.default_rng(2))
    for moved in (reference + 1000.0, -reference, 0.001 * reference):
        assert [p.tolist() for p in find_plateaus(moved)] == [p.tolist() for p in find_plateaus(reference)]


@pytest.mark.parametrize(
    "reference",
    [
        np.linspace(0.0, 20.0, 2000),
        10.0 * np.sin(np.arange(3000) / 60.0),
        np.abs(np.arange(4000) % 400 - 200.0) / 10.0,
        np.zeros(500),
        np.random.default_rng(3).normal(0.0, 1.0, 800),
        np.arange(5.0),
        np.empty(0),
    ],
    ids=["ramp", "sine", "triangle", "constant", "noise", "short", "empty"],
)
def test_what_does_not_stand_still_has_no_plateaus(reference):
    starts, stops = find_plateaus(reference)
    assert len(starts) == len(stops) == 0


def test_readings_of_a_log():
    rng = np.random.default_rng(4)
    time, reference, _ = staircase_log(UP_AND_DOWN, [9.0] * 11, noise=0.01, rng=rng)
    signal = 80.0 + 1.5 * reference + 0.03 * rng.normal(0.0, 1.0, len(time))
    features = readings_of_staircase(
        trial_of(reference, signal, time, temperature_c=np.full(len(time), 22.5))
    )
    frame = features.readings.frame
    assert features.notices == ()
    assert frame["order"].tolist() == list(range(1, 12))
    assert frame["direction"].tolist() == ["rising"] * 5 + ["turning"] + ["falling"] * 5
    assert frame["elongation_mm"].to_numpy() == pytest.approx(UP_AND_DOWN, abs=0.01)
    assert frame["signal"].to_numpy() == pytest.approx(80.0 + 1.5 * frame["elongation_mm"], abs=0.03)
    assert frame["strain"].to_numpy() == pytest.approx(frame["elongation_mm"] / REST)
    # settling part left out: of 90 samples the first third and the last one
    assert frame["count"].between(55, 60).all()
    assert frame["standard_error"].to_numpy() == pytest.approx(np.full(11, 0.03 / np.sqrt(58)), rel=0.4)
    assert frame["time_since_motion_s"].between(5.5, 6.5).all()
    assert frame["dwell_s"].between(8.5, 9.1).all()
    assert frame["temperature_c"].eq(22.5).all()
    assert features.zero_return == pytest.approx(0.0, abs=0.03)


def test_the_part_that_settles_is_left_out():
    time, reference, owner = staircase_log(UP_AND_DOWN, [12.0] * 11)
    since = np.zeros(len(time))
    for place in range(1, len(time)):
        since[place] = since[place - 1] + 0.1 if owner[place] == owner[place - 1] else 0.0
    signal = 80.0 + 1.5 * reference - 3.0 * np.exp(-since / 0.8)
    frame = readings_of_staircase(trial_of(reference, signal, time)).readings.frame
    assert frame["signal"].to_numpy() == pytest.approx(80.0 + 1.5 * np.array(UP_AND_DOWN), abs=0.01)


def test_a_signal_that_still_moves_is_noted_and_kept():
    rng = np.random.default_rng(5)
    time, reference, owner = staircase_log(UP_AND_DOWN, [9.0] * 11)
    signal = 80.0 + 1.5 * reference + 0.01 * rng.normal(0.0, 1.0, len(time))
    inside = np.flatnonzero(owner == 4)
    signal[inside] += 0.05 * np.arange(len(inside)) / 10.0
    features = readings_of_staircase(trial_of(reference, signal, time))
    assert features.readings.frame["settled"].tolist() == [n != 4 for n in range(11)]
    (notice,) = features.notices
    assert (notice.code, notice.file, notice.count) == ("not-settled", "trials/a.csv", 1)


def test_missing_signals_are_left_out_and_counted():
    time, reference, owner = staircase_log(UP_AND_DOWN, [6.0] * 11)
    signal = 80.0 + 1.5 * reference
    signal[owner == 3] = np.nan
    signal[np.flatnonzero(owner == 5)[::2]] = np.nan
    gappy = reference.copy()
    gappy[[7, 8]] = np.nan
    features = readings_of_staircase(trial_of(gappy, signal, time))
    frame = features.readings.frame
    assert len(frame) == 10
    assert frame["signal"].to_numpy() == pytest.approx(80.0 + 1.5 * np.delete(UP_AND_DOWN, 3))
    assert {(n.code, n.count) for n in features.notices} == {
        ("missing-values", 2),
        ("plateau-without-signal", 1),
    }


def test_a_level_column_tells_the_plateaus():
    time, reference, owner = staircase_log(UP_AND_DOWN, [6.0] * 11)
    level = np.where(owner < 0, np.nan, owner)
    wandering = reference + 0.8 * np.sin(time)
    frame = readings_of_staircase(trial_of(wandering, 80.0 + reference, time, level=level)).readings.frame
    assert len(frame) == 11
    assert frame["signal"].to_numpy() == pytest.approx(80.0 + np.array(UP_AND_DOWN))


def test_time_that_runs_backwards_keeps_its_order_and_gives_no_times():
    time, reference, _ = staircase_log(UP_AND_DOWN, [6.0] * 11)
    shuffled = time.copy()
    shuffled[40] = -1.0
    trial = replace(trial_of(reference, 80.0 + reference, shuffled), time_is_ordered=False)
    frame = readings_of_staircase(trial).readings.frame
    assert len(frame) == 11
    assert frame[["time_s", "time_since_motion_s", "dwell_s"]].isna().all().all()


def test_a_short_ramp_gives_a_notice_and_no_readings():
    # the hostile recordings are such ramps
    data = pd.read_csv(HOSTILE / "01_clean.csv", comment="#")
    stretch, signal = data["stretch_mm"].to_numpy(), data["capacitance_pF"].to_numpy()
    features = readings_of_staircase(trial_of(stretch, signal, data["time_s"].to_numpy()))
    assert features.readings.count == 0
    (notice,) = features.notices
    assert notice.code == "no-plateaus"
    assert notice.weight == "noted"


def test_a_trial_without_any_reference_gives_a_notice():
    trial = replace(trial_of(np.zeros(3), np.ones(3)), elongation_mm=None, length_mm=None, strain=None)
    features = readings_of_staircase(trial)
    assert features.readings.count == 0
    assert [n.code for n in features.notices] == ["reference-not-known"]


def test_a_table_gives_one_reading_a_row():
    levels = np.array(UP_AND_DOWN)
    signal = 80.0 + levels + np.linspace(0.0, 0.5, 11)
    features = readings_of_staircase(trial_of(levels, signal))
    frame = features.readings.frame
    assert frame["signal"].tolist() == signal.tolist()
    assert frame["direction"].tolist() == ["rising"] * 5 + ["turning"] + ["falling"] * 5
    assert frame["standard_error"].isna().all()
    assert features.zero_return == pytest.approx(0.5)


def test_a_table_that_lists_the_turn_once_a_branch_keeps_both():
    # as textbook tables do: the top level in both columns
    levels = np.array([0.0, 5.0, 10.0, 10.0, 5.0, 0.0])
    direction = np.array([1.0, 1, 1, -1, -1, -1])
    frame = readings_of_staircase(trial_of(levels, 80.0 + levels, direction=direction)).readings.frame
    assert frame["direction"].tolist() == ["rising"] * 3 + ["falling"] * 3
    single = np.array([0.0, 5.0, 10.0, 5.0, 0.0])
    given = np.array([1.0, 1, 1, -1, -1])
    frame = readings_of_staircase(trial_of(single, 80.0 + single, direction=given)).readings.frame
    assert frame["direction"].tolist() == ["rising", "rising", "turning", "falling", "falling"]


def test_rows_without_a_signal_are_counted_in_tables_too():
    levels = np.array([0.0, 4.0, 8.0, 12.0])
    features = readings_of_staircase(trial_of(levels, np.array([80.0, np.nan, 88.0, 92.0])))
    assert features.readings.count == 3
    assert [(n.code, n.count) for n in features.notices] == [("missing-values", 1)]
    alone = readings_of_staircase(trial_of(levels[:1], np.array([80.0])))
    assert alone.readings.count == 0
    assert [n.code for n in alone.notices] == ["too-few-readings"]


@given(st.lists(st.integers(0, 8), min_size=2, max_size=14))
def test_directions_are_those_of_the_moves(levels):
    found = plateau_directions(np.array(levels, dtype=float))
    for number in range(1, len(levels) - 1):
        before, after = levels[number] - levels[number - 1], levels[number + 1] - levels[number]
        if before and after:
            expected = "turning" if before * after < 0 else ("rising" if before > 0 else "falling")
            assert found[number] == expected


def test_zero_return_needs_a_return():
    levels, signals = np.array([0.0, 5.0, 10.0, 5.0, 0.0]), np.array([1.0, 2.0, 3.0, 2.2, 1.3])
    assert zero_return(levels, signals) == pytest.approx(0.3)
    assert np.isnan(zero_return(levels[:3], signals[:3]))
