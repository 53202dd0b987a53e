"""Readings of all trials put together: reference quantity, nominal levels, what is used."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN, Trial, TrialIdentity
from campaign.trials.readings import (
    READING_COLUMNS,
    READING_EXTRA_COLUMNS,
    ReadingPart,
    collect_readings,
)
from campaign.trials.staircase import readings_of_staircase

LEVELS = np.array([0.0, 0.1, 0.2, 0.3, 0.4, 0.3, 0.2, 0.1, 0.0])


def part(
    sensor="S1", repetition=1, *, strain=LEVELS, rest=50.0, known=True, recorded="elongation", offset=0.0
):
    identity = TrialIdentity(
        f"trials/{sensor}_{repetition}.csv", "staircase", "one", "", "M1", sensor, sensor, repetition,
        "", "", "", rest if known else float("nan"), float("nan"),
    )  # fmt: skip
    elongation = rest * (strain + offset)
    trial = Trial(
        identity,
        80.0 + 70.0 * strain,
        "pF",
        elongation_mm=elongation if known or recorded == "elongation" else None,
        length_mm=rest + elongation if known or recorded == "length" else None,
        strain=strain + offset if known else None,
        reference=recorded,
    )
    return readings_of_staircase(trial).readings


def test_strain_where_all_rest_lengths_are_known():
    readings = collect_readings([part("S1", 2), part("S1", 1), part("S0", 1, rest=80.0)])
    assert readings.reference == STRAIN
    assert list(readings.table.columns) == [*READING_COLUMNS, *READING_EXTRA_COLUMNS]
    assert readings.table[["sensor", "repetition"]].drop_duplicates().to_numpy().tolist() == [
        ["S0", 1], ["S1", 1], ["S1", 2],
    ]  # fmt: skip
    assert readings.table["used"].all()
    assert readings.notices == ()


@pytest.mark.parametrize(("recorded", "expected"), [("elongation", ELONGATION), ("length", LENGTH)])
def test_millimetres_where_no_rest_length_is_known(recorded, expected):
    readings = collect_readings([part(known=False, recorded=recorded)])
    assert readings.reference == expected
    assert readings.table["strain"].isna().all()
    assert readings.table["x"].tolist() == readings.table[f"{expected.name}_mm"].tolist()


def test_one_sensor_without_rest_length_moves_all_to_elongation():
    readings = collect_readings([part("S1"), part("S2", known=False)])
    assert readings.reference == ELONGATION
    assert readings.table["used"].all()


def test_a_trial_without_the_common_quantity_is_not_used_and_named():
    readings = collect_readings([part("S1"), part("S3"), part("S2", known=False, recorded="length")])
    assert readings.reference == LENGTH
    assert readings.table["used"].all()
    readings = collect_readings([
        part("S1", known=False), part("S3", known=False), part("S2", known=False, recorded="length"),
    ])  # fmt: skip
    assert readings.reference == ELONGATION
    assert readings.table.groupby("sensor")["used"].all().to_dict() == {"S1": True, "S2": False, "S3": True}
    (notice,) = readings.notices
    assert (notice.code, notice.file, notice.count) == ("reference-not-common", "trials/S2_1.csv", 9)


def test_levels_common_to_the_campaign_are_named_by_their_nominal_value():
    rng = np.random.default_rng(8)
    parts = [part(f"S{s}", r, strain=LEVELS + rng.normal(0.0, 0.0005, 9)) for s in range(3) for r in (1, 2)]
    table = collect_readings(parts).table
    assert sorted(set(table["nominal_level"])) == pytest.approx([0.0, 0.1, 0.2, 0.3, 0.4], abs=1e-12)
    assert (table["nominal_level"] - table["x"]).abs().max() < 0.003


def test_levels_common_to_a_sensor_alone_are_no_campaign_levels():
    # the stand steps in millimetres and sensors differ in length: only strains of one sensor's runs agree
    parts = [
        part(f"S{s}", r, strain=LEVELS * 60.0 / rest, rest=rest)
        for s, rest in enumerate([60.0, 73.0, 81.0, 97.0])
        for r in (1, 2)
    ]
    table = collect_readings(parts).table
    assert table["nominal_level"].isna().all()
    assert table["sensor_level"].notna().all()
    assert (table["sensor_level"] - table["x"]).abs().max() < 0.002
    assert table.groupby("sensor")["sensor_level"].nunique().eq(5).all()


def test_an_odd_run_has_no_nominal_levels_and_takes_none_from_the_others():
    odd = np.array([0.03, 0.14, 0.27, 0.36])
    table = collect_readings([*(part("S1", r) for r in (1, 2, 3, 4)), part("S1", 5, strain=odd)]).table
    assert table.loc[table["repetition"] == 5, "nominal_level"].isna().all()
    assert table.loc[table["repetition"] < 5, "nominal_level"].notna().all()


def test_the_largest_reference_seen_before():
    table = collect_readings([part()]).table
    assert table["largest_x_before"].tolist() == pytest.approx([0.0, 0.0, 0.1, 0.2, 0.3, 0.4, 0.4, 0.4, 0.4])


def test_sensors_set_aside_stay_in_the_table_unused():
    readings = collect_readings([part("S1"), part("S2")], set_aside=[("M1", "S2")])
    assert readings.usable["sensor"].unique().tolist() == ["S1"]
    assert len(readings.table) == 18


def test_nothing_to_put_together():
    readings = collect_readings([ReadingPart({}, 0)])
    assert readings.table.empty
    assert set(READING_COLUMNS) <= set(readings.table.columns)
