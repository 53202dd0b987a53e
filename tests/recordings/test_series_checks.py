"""What values give away: sentinels, suspects, clocks, repeats, stuck signals."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.recordings.description import ColumnRule, Description
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings

TIME = np.arange(40) * 0.1
LENGTH = 40 + np.arange(40) * 0.5
SIGNAL = 80 + np.arange(40) * 0.3 + np.tile([0.01, -0.01], 20)


def read(
    time=TIME, length=LENGTH, signal=SIGNAL, *, header="time_s,length_mm,capacitance_pF", rules=()
) -> ReadOutcome:
    lines = [f"{float(t)!r},{float(x)!r},{float(y)!r}" for t, x, y in zip(time, length, signal)]
    text = header + "\n" + "\n".join(lines) + "\n"
    [outcome] = read_recordings([RecordingBytes("a.csv", text.encode())], Description("t", columns=rules))
    return outcome


def changed(values: np.ndarray, at: int | slice, value: float) -> np.ndarray:
    copy = values.copy()
    copy[at] = value
    return copy


def codes(outcome: ReadOutcome) -> list[tuple[str, int | None, int | None, int]]:
    return [(n.code, n.line, n.column, n.count) for n in outcome.notices]


def test_a_healthy_recording_has_no_remarks():
    assert read().notices == ()


@pytest.mark.parametrize("value", [9.91e37, -1e105, 1e23, 3.4028234663852886e38])
def test_values_beyond_anything_physical_are_missing(value):
    outcome = read(signal=changed(SIGNAL, slice(5, 8), value))
    assert codes(outcome) == [("sentinel", 7, 3, 3)]
    assert np.isnan(outcome.recording.channels[2].values[5:8]).all()


@pytest.mark.parametrize("value", [-999.0, 9999.0, 65535.0, -32768.0])
def test_isolated_usual_no_values_are_kept_and_remarked_on(value):
    outcome = read(signal=changed(SIGNAL, 5, value))
    assert codes(outcome) == [("suspect-sentinel", 7, 3, 1)]
    assert outcome.recording.channels[2].values[5] == value


def test_a_value_among_others_is_no_suspect():
    assert read(signal=SIGNAL - 80 + 990).notices == ()
    assert read(signal=changed(SIGNAL + 900, 5, 999.0)).notices == ()


def test_an_isolated_declared_no_value_is_missing_without_suspicion():
    rule = ColumnRule("signal", header="capacitance_pF", missing=("-999",))
    assert codes(read(signal=changed(SIGNAL, 5, -999.0), rules=(rule,))) == [("missing-token", 7, 3, 1)]


def test_time_that_runs_backwards_is_counted_and_kept():
    time = TIME.copy()
    time[20:] -= 1.5
    outcome = read(time=time)
    assert codes(outcome) == [("time-order", 22, 1, 1)]
    assert np.array_equal(outcome.recording.channels[0].values, time)


def test_a_coarse_clock_and_double_rows_are_told_apart():
    assert codes(read(time=np.floor(TIME * 2) / 2)) == [("time-resolution", 3, 1, 32)]
    order = np.repeat(np.arange(40), np.where(np.arange(40) == 4, 3, 1))
    assert codes(read(TIME[order], LENGTH[order], SIGNAL[order])) == [("duplicate-row", 7, None, 2)]


def test_a_table_without_time_may_repeat_its_rows():
    text = "length_mm,capacitance_pF\n" + "40,80\n40,80\n41,81\n42,82\n" * 2
    [outcome] = read_recordings([RecordingBytes("a.csv", text.encode())], Description("t"))
    assert outcome.notices == ()


def test_a_signal_that_repeats_while_the_reference_moves_is_stuck():
    outcome = read(signal=changed(SIGNAL, slice(10, 30), 83.25))
    assert codes(outcome) == [("stuck", 12, 3, 20)]
    assert "83.25" in outcome.notices[0].what


def test_a_signal_that_repeats_on_a_plateau_is_not_stuck():
    length = changed(LENGTH, slice(10, 30), LENGTH[10])
    assert read(length=length, signal=changed(SIGNAL, slice(10, 30), 83.25)).notices == ()


def test_seconds_since_1970_under_milliseconds_are_remarked_on_not_mended():
    outcome = read(time=1780991636.5 + TIME, header="timestamp(ms),length_mm,capacitance_pF")
    assert ("clock-unit", 2, 1, 1) in codes(outcome)
    assert outcome.recording.channels[0].values[0] == 1780991.6365
    mended = read(
        time=1780991636.5 + TIME,
        header="timestamp(ms),length_mm,capacitance_pF",
        rules=(ColumnRule("time", header="timestamp(ms)", unit="s"),),
    )
    assert [n.code for n in mended.notices] == ["unit-overruled"]


def test_an_offset_is_added_in_millimetres_and_said():
    rule = ColumnRule("length", header="length_cm", unit="cm", offset_mm=12.5)
    outcome = read(header="time_s,length_cm,capacitance_pF", rules=(rule,))
    assert outcome.recording.channels[1].values[0] == 412.5
    assert [(n.code, n.column) for n in outcome.notices] == [("converted", None), ("converted", 2)]
