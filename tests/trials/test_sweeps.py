"""Trials of influences reduced to sweeps: dwells, ramps, tables, kept lengths, and what is remarked."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.influences import (
    features_of_bend,
    features_of_contact,
    features_of_offaxis,
    features_of_proximity,
    features_of_thermal,
)
from campaign.trials.pressure import features_of_pressure
from campaign.trials.sweeps import POINT_COLUMNS

REST = 60.0


def trial(signal, kind="pressure", **series):
    identity = TrialIdentity("trials/a.csv", kind, "first", "", "M01", "AB", "AB", 1, "", "", "", REST, 0.1)
    return Trial(identity, np.asarray(signal, dtype=float), "pF", **series)


def at_strain(x):
    return {"strain": x, "elongation_mm": REST * x, "length_mm": REST * (1.0 + x)}


def ramps(lengths=(0.0, 0.2, 0.4), seconds=60.0, top=20.0, step=0.5):
    """Time, strain, pressure: up and down in a triangle at each kept length."""
    t = np.arange(0.0, seconds * len(lengths), step)
    x = np.asarray(lengths)[(t // seconds).astype(int)]
    return t, x, top * (1.0 - np.abs((t % seconds) / (seconds / 2.0) - 1.0))


def codes(features):
    return [notice.code for notice in features.notices]


def test_ramps_at_three_lengths_are_three_sweeps_with_both_branches():
    rng = np.random.default_rng(1)
    t, x, p = ramps()
    y = 100.0 + 80.0 * x + (0.05 + 0.1 * x) * p
    found = features_of_pressure(
        trial(y, time_s=t, pressure_kpa=p + rng.normal(0, 0.02, len(p)), **at_strain(x))
    )
    points = found.points
    assert list(points.columns) == list(POINT_COLUMNS)
    assert found.notices == ()
    assert points.groupby("sweep")["strain"].mean().tolist() == pytest.approx([0.0, 0.2, 0.4])
    assert points.groupby(["sweep", "branch"]).size().tolist() == [12] * 6
    rising = points[points["branch"] == 1]
    assert np.all(rising.groupby("sweep")["influence"].apply(np.ptp) > 17.0)
    assert np.all(points.groupby("sweep")["time_s"].diff().dropna() > 0)


def test_dwells_become_one_point_each_without_their_settling():
    levels = np.repeat([0.0, 5.0, 10.0, 15.0, 10.0, 5.0, 0.0], 40)
    t = np.arange(len(levels)) * 0.5
    settling = np.exp(-(np.arange(len(levels)) % 40) / 3.0)
    found = features_of_pressure(
        trial(levels + settling, time_s=t, pressure_kpa=levels, **at_strain(np.zeros(len(t))))
    )
    assert found.points["influence"].tolist() == pytest.approx([0, 5, 10, 15, 10, 5, 0])
    assert found.points["signal"].tolist() == pytest.approx([0, 5, 10, 15, 10, 5, 0], abs=0.03)
    assert found.points["branch"].tolist() == [1, 1, 1, 0, -1, -1, -1]
    assert found.points["dwell_s"].min() > 5.0


def test_a_table_without_time_takes_every_row():
    p = np.array([0.0, 5.0, 10.0, 5.0, 0.0])
    found = features_of_pressure(trial(100 + 0.1 * p, pressure_kpa=p, **at_strain(np.full(5, 0.1))))
    assert found.points["influence"].tolist() == p.tolist()
    assert found.points["time_s"].isna().all()
    assert found.points["branch"].tolist() == [1, 1, 0, -1, -1]


def test_a_length_that_is_not_this_sensors_leaves_one_sweep_at_an_unknown_length():
    t, _, p = ramps(lengths=(0.0,))
    found = features_of_pressure(trial(100 + 0.1 * p, time_s=t, pressure_kpa=p))
    assert found.points["sweep"].unique().tolist() == [0]
    assert found.points["strain"].isna().all()


@pytest.mark.parametrize(
    ("series", "code"),
    [
        ({}, "influence-not-recorded"),
        ({"pressure_kpa": np.full(120, 3.0)}, "influence-constant"),
        ({"pressure_kpa": np.random.default_rng(0).normal(3.0, 1.0, 120)}, "influence-constant"),
    ],
)
def test_no_sweep_is_said_why(series, code):
    t, x, _ = ramps(lengths=(0.0,))
    found = features_of_pressure(trial(np.ones(len(t)), time_s=t, **series, **at_strain(x)))
    assert codes(found) == [code]
    assert found.points.empty
    assert found.notices[0].remedy


def test_a_length_that_moves_all_the_time_is_no_sweep():
    t, _, p = ramps(lengths=(0.0,))
    found = features_of_pressure(
        trial(p, time_s=t, pressure_kpa=p, **at_strain(np.linspace(0.0, 0.4, len(t))))
    )
    assert codes(found) == ["length-not-kept"]


def test_a_length_with_little_pressure_gives_no_slope():
    t, x, p = ramps(lengths=(0.0, 0.4))
    p = np.where(x > 0.1, 0.1 * p, p)
    found = features_of_pressure(trial(p, time_s=t, pressure_kpa=p, **at_strain(x)))
    assert codes(found) == ["sweep-too-small"]
    assert found.points["sweep"].unique().tolist() == [0]


def test_one_way_pause_and_clipping_are_remarked():
    t = np.arange(0.0, 100.0, 0.5)
    p = 0.2 * t
    one_way = features_of_pressure(trial(p, time_s=t, pressure_kpa=p))
    assert codes(one_way) == ["no-return"]
    late = np.where(t > 50.0, t + 200.0, t)
    assert "sweep-gap" in codes(features_of_pressure(trial(p, time_s=late, pressure_kpa=p)))
    clipped = features_of_pressure(trial(np.minimum(p, 10.0), time_s=t, pressure_kpa=p))
    assert "sweep-clipped" in codes(clipped)
    assert "50 %" in next(n.what for n in clipped.notices if n.code == "sweep-clipped")


def test_missing_rows_are_counted():
    t, x, p = ramps(lengths=(0.0,))
    y = 0.1 * p
    y[10:13] = np.nan
    found = features_of_pressure(trial(y, time_s=t, pressure_kpa=p, **at_strain(x)))
    assert [(n.code, n.count) for n in found.notices] == [("missing-values", 3)]


def test_curves_keep_the_extremes_of_the_whole_sweep():
    t, x, p = ramps(lengths=(0.0,), step=0.01)
    y = 0.1 * p
    y[4321] = 7.0
    found = features_of_pressure(trial(y, time_s=t, pressure_kpa=p, **at_strain(x)))
    influence, signal = found.curves[0]
    assert len(influence) <= 164
    assert (influence.max(), signal.max()) == (p.max(), 7.0)


@given(st.floats(0.5, 50.0), st.integers(0, 1000))
@settings(max_examples=25, deadline=None)
def test_the_influence_may_be_in_any_unit(factor, seed):
    rng = np.random.default_rng(seed)
    t, x, p = ramps()
    y = 0.3 * p + rng.normal(0, 0.1, len(p))
    plain = features_of_pressure(trial(y, time_s=t, pressure_kpa=p, **at_strain(x))).points
    scaled = features_of_pressure(trial(y, time_s=t, pressure_kpa=factor * p, **at_strain(x))).points
    assert scaled["influence"].to_numpy() == pytest.approx(factor * plain["influence"].to_numpy(), rel=1e-6)
    assert scaled["signal"].to_numpy() == pytest.approx(plain["signal"].to_numpy(), rel=1e-6)


# --- what is swept in the other kinds


def test_strain_across_from_a_length_is_over_the_shortest():
    t, _, p = ramps(lengths=(0.0,))
    length = 40.0 * (1.0 + p / 100.0)
    found = features_of_offaxis(trial(p, "offaxis", time_s=t, length_mm=length, reference="length"))
    assert (found.influence, found.unit) == ("transverse", "mm/mm")
    assert found.points["influence"].max() == pytest.approx(0.2, rel=0.06)
    assert found.points["length_mm"].isna().all()


def test_an_elongation_across_stays_in_mm():
    t, _, p = ramps(lengths=(0.0,))
    found = features_of_offaxis(trial(p, "offaxis", time_s=t, elongation_mm=p, reference="elongation"))
    assert found.unit == "mm"


def test_a_body_nearby_counts_by_one_over_its_distance():
    t = np.arange(0.0, 200.0)
    distance = 5.0 + np.abs(t - 100.0)
    found = features_of_proximity(
        trial(100.0 - 20.0 / distance, "proximity", time_s=t, length_mm=distance, reference="length")
    )
    slope = np.polyfit(found.points["influence"], found.points["signal"], 1)
    assert found.unit == "1/mm"
    assert slope == pytest.approx([-20.0, 100.0], rel=1e-9)


def test_a_bend_counts_by_its_curvature():
    t = np.arange(0.0, 100.0)
    radius = 1000.0 / (5.0 + 40.0 * (1.0 - np.abs(t / 50.0 - 1.0)))
    found = features_of_bend(trial(t * 0, "bend", time_s=t, length_mm=radius, reference="length"))
    assert found.unit == "1/m"
    assert found.points["influence"].between(5.0, 45.0).all()


def test_temperature_and_load_are_taken_as_recorded():
    t, x, p = ramps(lengths=(0.1,))
    warm = features_of_thermal(trial(p, "thermal", time_s=t, temperature_c=20.0 + p, **at_strain(x)))
    assert (warm.influence, warm.unit) == ("temperature", "°C")
    loaded = features_of_contact(trial(p, "contact", time_s=t, force_n=p, **at_strain(x)))
    assert (loaded.influence, loaded.unit) == ("contact", "N")


def test_steps_stand_for_what_was_not_recorded():
    level = np.repeat([0.0, 1.0, 2.0, 1.0, 0.0], 30)
    t = np.arange(len(level), dtype=float)
    found = features_of_bend(trial(3.0 * level, "bend", time_s=t, level=level, **at_strain(np.zeros(len(t)))))
    assert found.unit == "step"
    assert np.polyfit(found.points["influence"], found.points["signal"], 1)[0] == pytest.approx(3.0)
