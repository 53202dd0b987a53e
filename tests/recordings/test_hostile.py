"""Every broken recording of tests/campaigns/hostile behaves as its expectation says, on both roads."""

from __future__ import annotations

import csv
import json
import math
import pickle
from pathlib import Path

import pytest

from campaign.recordings.description import Description
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings

HOSTILE = Path(__file__).parents[1] / "campaigns" / "hostile"
EXPECTATIONS = list(csv.DictReader((HOSTILE / "expectations.csv").read_text().splitlines()))
TRUTH = json.loads((HOSTILE / "truth.json").read_text())
QUANTITIES = ("time", "elongation", "signal", "pressure", "force")
UNITS = ("s", "mm", "pF", "kPa", "N")


def recording_bytes(name: str) -> RecordingBytes:
    if name == "46_huge_field.csv":
        clean = (HOSTILE / "recordings" / "01_clean.csv").read_text()
        return RecordingBytes(name, clean.replace("83.2458", "8" * 1_000_000, 1).encode())
    return RecordingBytes(name, (HOSTILE / "recordings" / name).read_bytes())


def read(name: str, *, careful: bool = False) -> ReadOutcome:
    [outcome] = read_recordings([recording_bytes(name)], Description("hostile"), careful=careful)
    return outcome


def fate(outcome: ReadOutcome) -> str:
    if outcome.recording is None:
        return "set aside"
    return "used, noted" if outcome.notices else "used"


def number_or_none(text: str) -> int | None:
    return None if text == "-" else int(text)


def test_no_case_is_left_out():
    kept = {path.name for path in (HOSTILE / "recordings").iterdir()} | {"46_huge_field.csv"}
    assert kept == {case["file"] for case in EXPECTATIONS} == set(TRUTH["rows"])
    assert len(kept) == 54


@pytest.mark.parametrize("careful", [False, True], ids=["as it comes", "careful"])
@pytest.mark.parametrize("case", EXPECTATIONS, ids=lambda case: case["file"])
def test_the_fate_and_the_notice_are_as_expected(case, careful):
    outcome = read(case["file"], careful=careful)
    assert fate(outcome) == case["fate"]
    if case["notice"] == "-":
        assert outcome.notices == ()
        return
    wanted = (case["notice"], number_or_none(case["line"]), number_or_none(case["column"]))
    assert wanted in [(n.code, n.line, n.column) for n in outcome.notices]
    assert all(n.file == case["file"] and n.what and n.done for n in outcome.notices)


@pytest.mark.parametrize("case", EXPECTATIONS, ids=lambda case: case["file"])
def test_nothing_else_is_remarked_on(case):
    others = {n.code for n in read(case["file"]).notices} - {case["notice"]}
    assert others == set()


@pytest.mark.parametrize("name", [name for name, rows in TRUTH["rows"].items() if rows is not None])
def test_values_are_the_true_ones(name):
    recording = read(name).recording
    assert recording.rows == len(TRUTH["rows"][name])
    for index, (quantity, unit) in enumerate(zip(QUANTITIES, UNITS)):
        [channel] = [c for c in recording.channels if c.quantity == quantity]
        assert channel.unit == unit
        truth = [math.nan if row[index] is None else row[index] for row in TRUTH["rows"][name]]
        tolerance = 1e-12 if name == "60_other_units.csv" else 0.0
        assert channel.values.tolist() == pytest.approx(truth, rel=tolerance, abs=0.0, nan_ok=True)


def test_the_preamble_is_kept():
    preamble = read("01_clean.csv").recording.preamble
    assert preamble == {
        "module": "M01",
        "sensor": "S02",
        "kind": "step",
        "repetition": "1",
        "temperature_degc": "22.5",
        "operator": "A",
    }
    assert read("02_utf8_bom_before_comment.csv").recording.preamble == preamble
    assert read("10_utf16le_bom.csv").recording.preamble == preamble
    assert read("13_latin1_meta.csv").recording.preamble["layout"] == "gewölbt"


def test_lost_text_is_shown():
    [footer] = read("63_footer.csv").notices
    assert "Max,5.5,89.0,0.4,1.9" in footer.what
    assert "Samples: 12" in footer.what
    [unit, other] = read("61_unknown_unit.csv").notices
    assert "pF?" in unit.what
    assert "kPa?" in other.what
    [binary] = read("68_gzip_named_csv.csv").notices
    assert "gzip" in binary.what


def test_three_missing_values_have_a_notice_each():
    places = [(n.line, n.column, n.count) for n in read("25_nan_tokens.csv").notices]
    assert places == [(10, 3, 1), (12, 4, 1), (13, 5, 1)]


def test_all_files_at_once_read_as_each_alone():
    names = [case["file"] for case in EXPECTATIONS]
    together = read_recordings([recording_bytes(name) for name in names], Description("hostile"))
    for name, outcome in zip(names, together, strict=True):
        alone = read(name)
        assert outcome.notices == alone.notices
        assert (outcome.recording is None) == (alone.recording is None)


def test_outcomes_travel_between_processes():
    outcome = read("21_over_token.csv")
    travelled = pickle.loads(pickle.dumps(outcome))
    assert travelled.notices == outcome.notices
    assert travelled.recording.preamble == outcome.recording.preamble
    for there, here in zip(travelled.recording.channels, outcome.recording.channels, strict=True):
        assert (there.quantity, there.unit, there.position) == (here.quantity, here.unit, here.position)
        assert there.values.tolist() == pytest.approx(here.values.tolist(), nan_ok=True, rel=0, abs=0)
