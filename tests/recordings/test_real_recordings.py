"""Recordings that others made and published are read, unaltered, through a campaign.toml alone."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from campaign.recordings.description_file import load_description
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings
from campaign.recordings.recording import Channel

REAL = Path(__file__).parents[1] / "campaigns" / "real"


def read(folder: str, name: str, *, careful: bool = False) -> ReadOutcome:
    items = [RecordingBytes(name, (REAL / folder / name).read_bytes())]
    [outcome] = read_recordings(items, load_description(REAL / folder), careful=careful)
    return outcome


def signal(outcome: ReadOutcome, repetition: int | None = None) -> Channel:
    [channel] = [
        c for c in outcome.recording.channels if c.quantity == "signal" and c.repetition == repetition
    ]
    return channel


@pytest.mark.parametrize(
    ("folder", "name"),
    [
        ("soft_capacitive_cell", "steps.csv"),
        ("pneumatic_seals", "1_O-ring257_1bar.csv"),
        ("bench_log", "bench_log_1.csv"),
        ("pressure_decay", "chamber_a.csv"),
    ],
)
def test_both_roads_read_them_alike(folder, name):
    one, other = read(folder, name), read(folder, name, careful=True)
    assert one.notices == other.notices
    for a, b in zip(one.recording.channels, other.recording.channels, strict=True):
        assert np.array_equal(a.values, b.values, equal_nan=True)


def test_three_repetitions_stand_side_by_side():
    outcome = read("soft_capacitive_cell", "steps.csv")
    assert outcome.notices == ()
    assert [(c.quantity, c.position, c.repetition) for c in outcome.recording.channels] == [
        ("length", 3, None),
        ("signal", 6, 1),
        ("signal", 21, 2),
        ("signal", 23, 3),
    ]
    # first, lowest and last row of the file as published
    assert outcome.recording.channels[0].values[[0, 15, 30]].tolist() == [6.0, -1.5, 6.0]
    assert [signal(outcome, r).values[15] for r in (1, 2, 3)] == [3.67, 3.6, 3.11]
    assert "Modele : d=K*C1" in outcome.left_alone
    assert outcome.recording.line_numbers.tolist() == list(range(2, 33))


def test_columns_are_told_by_their_places_where_there_is_no_header():
    outcome = read("pneumatic_seals", "1_O-ring257_1bar.csv")
    channels = {c.quantity: c for c in outcome.recording.channels}
    assert (channels["signal"].unit, channels["pressure"].unit, channels["time"].unit) == ("N", "kPa", "s")
    # the first row as published: 0.000 4.546 0.504 1.198 0.000 1.008 55.746
    assert channels["signal"].values[0] == 55.746
    assert channels["pressure"].values[0] == pytest.approx(100.8, rel=1e-12)
    assert channels["time"].values[1] == 0.01
    assert {n.code for n in outcome.notices} >= {"crlf", "dialect", "converted"}
    assert all(n.weight == "noted" for n in outcome.notices)


def test_a_log_of_one_channel_a_row_is_read_and_its_gaps_are_one_notice():
    outcome = read("bench_log", "bench_log_1.csv")
    assert outcome.recording.rows == 1113
    assert int(np.isnan(signal(outcome).values).sum()) == 684
    by_code = {n.code: n for n in outcome.notices}
    assert (by_code["missing-token"].count, by_code["missing-token"].line) == (684, 3)
    assert by_code["trailing-delimiter"].column == 8
    assert by_code["unit-overruled"].column == 1
    assert len(outcome.notices) == 3
    time = outcome.recording.channels[0].values
    assert 14.0 < time[-1] - time[0] < 16.0


def test_points_of_thousands_are_read_where_they_are_declared():
    outcome = read("pressure_decay", "chamber_a.csv")
    time = outcome.recording.channels[0]
    # lines 11, 12 and the last as published: 1.003.000, 1.103.000 and 151.303.000 ms
    assert time.values[[10, 11, -1]].tolist() == [1.003, 1.103, 151.303]
    assert np.all(np.diff(time.values) > 0)
    assert signal(outcome).values[-1] == pytest.approx(728.4, rel=1e-12)
    assert signal(outcome).unit == "kPa"
