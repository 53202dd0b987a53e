"""Cyclic and endurance trials: what is taken from a log, and what a reader is told about it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

import numpy as np
import pytest

from campaign.notices import NOTICE_CODES, Notice
from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN, Trial
from campaign.trials.cyclic import CYCLE_COLUMNS, features_of_cyclic
from campaign.trials.endurance import features_of_endurance
from campaign.trials.features import into_reference
from tests.analyses.loop_campaign import SLOPE, Truth, cyclic_trial

QUIET = Truth(width=1.0, noise=0.01)


def trial(truth: Truth = QUIET, seed: int = 0, **given: object) -> Trial:
    return cyclic_trial(truth, np.random.default_rng(seed), **given)  # type: ignore[arg-type]


def codes(notices: Iterable[Notice]) -> set[str]:
    found = {notice.code for notice in notices}
    assert found <= set(NOTICE_CODES)
    return found


def test_every_cycle_is_a_row_with_its_loop() -> None:
    found = features_of_cyclic(trial(cycles=7))
    assert list(found.cycles.columns) == list(CYCLE_COLUMNS)
    assert found.cycles["cycle"].tolist() == [1, 2, 3, 4, 5, 6, 7]
    assert found.cycles["mid_width"].to_numpy() == pytest.approx(1.0, abs=0.05)
    assert found.cycles["rate"].to_numpy() == pytest.approx(0.8 / 10.0 * 90.0, rel=0.01)
    assert found.recorded == "length"
    assert found.width.shape == (7, 19)
    assert found.settled_from_cycle == 1.0
    assert codes(found.notices) == set()


def test_input_is_never_altered() -> None:
    given = trial()
    before = given.signal.copy(), given.length_mm.copy()
    features_of_cyclic(given)
    assert np.array_equal(given.signal, before[0])
    assert np.array_equal(given.length_mm, before[1])


def test_softening_of_the_first_cycles_is_seen_and_settles() -> None:
    found = features_of_cyclic(trial(Truth(width=1.0, noise=0.01, softening=0.05), cycles=12))
    span = found.cycles["signal_range"]
    assert span.iloc[0] > span.iloc[-1]
    assert 2 <= found.settled_from_cycle <= 5
    assert found.cycles["settled"].sum() == 12 - found.settled_from_cycle + 1


def test_the_first_settled_and_last_cycles_are_kept_for_drawing() -> None:
    found = features_of_cyclic(trial(Truth(width=1.0, noise=0.01, softening=0.05), cycles=12, samples=400))
    drawn = [curve.cycle for curve in found.curves]
    assert {1, int(found.settled_from_cycle), 12} <= set(drawn)
    assert all(len(curve.x) <= 130 for curve in found.curves)


def test_too_few_cycles_are_told() -> None:
    assert "too-few-cycles" in codes(features_of_cyclic(trial(cycles=2)).notices)


def test_a_trial_that_goes_nowhere_gives_no_loops() -> None:
    given = trial()
    still = replace(given, length_mm=np.full(len(given.signal), 95.0), strain=None)
    found = features_of_cyclic(still)
    assert len(found.cycles) == 0
    assert codes(found.notices) == {"no-cycles"}
    nothing = features_of_cyclic(replace(given, length_mm=None, strain=None))
    assert codes(nothing.notices) == {"reference-not-known"}


def test_two_rates_in_one_trial_are_told() -> None:
    given = trial(cycles=8)
    time = np.concatenate(
        [given.time_s[:401], given.time_s[400] + (given.time_s[401:] - given.time_s[400]) / 4]
    )
    found = features_of_cyclic(replace(given, time_s=time))
    assert "rate-not-constant" in codes(found.notices)
    assert found.cycles["rate"].iloc[-1] == pytest.approx(4 * found.cycles["rate"].iloc[0], rel=0.02)


def test_without_a_time_rates_are_unknown_and_loops_are_taken() -> None:
    found = features_of_cyclic(replace(trial(), time_s=None))
    assert found.cycles["rate"].isna().all()
    assert "rate-unknown" in codes(found.notices)
    assert found.cycles["mid_width"].to_numpy() == pytest.approx(1.0, abs=0.05)


def test_gaps_in_time_and_holes_in_a_branch_are_told() -> None:
    given = trial(cycles=6)
    kept = np.ones(len(given.signal), bool)
    kept[215:240] = False
    cut = replace(
        given,
        signal=given.signal[kept],
        time_s=given.time_s[kept],
        length_mm=given.length_mm[kept],
        strain=None,
    )
    found = features_of_cyclic(cut)
    assert {"time-gaps", "cycles-unequal"} <= codes(found.notices)
    assert not found.cycles["whole"].iloc[2]


def test_a_clipped_signal_is_told() -> None:
    given = trial(cycles=6)
    clipped = replace(given, signal=np.minimum(given.signal, 115.0))
    assert "clipped" in codes(features_of_cyclic(clipped).notices)
    assert "clipped" not in codes(features_of_cyclic(given).notices)


def test_cycles_that_turn_away_from_zero_strain_are_told() -> None:
    given = trial(cycles=6)
    off = replace(given, length_mm=given.length_mm + 8.0, strain=None)
    assert "no-return-to-zero" in codes(features_of_cyclic(off).notices)


def test_cycle_numbers_are_taken_as_recorded() -> None:
    given = trial(cycles=6)
    numbered = replace(given, cycle=1000.0 + np.arange(len(given.signal)) // 100)
    assert features_of_cyclic(numbered).cycles["cycle"].tolist() == [1000, 1001, 1002, 1003, 1004, 1005]


def test_missing_signals_do_not_stop_anything() -> None:
    given = trial(cycles=6)
    holes = given.signal.copy()
    holes[::7] = np.nan
    found = features_of_cyclic(replace(given, signal=holes))
    assert found.cycles["mid_width"].to_numpy() == pytest.approx(1.0, abs=0.05)
    nothing = features_of_cyclic(replace(given, signal=np.full(len(holes), np.nan)))
    assert not nothing.cycles["whole"].any()


@pytest.mark.parametrize("recorded", ["length", "elongation", "strain"])
@pytest.mark.parametrize("wanted", [STRAIN, ELONGATION, LENGTH])
def test_lengths_go_into_any_reference_and_never_without_a_rest_length(recorded: str, wanted: object) -> None:
    values = {"length": 99.0, "elongation": 9.0, "strain": 0.1}
    offset, factor = into_reference(recorded, wanted, 90.0)  # type: ignore[arg-type, misc]
    assert offset + factor * values[recorded] == pytest.approx(values[wanted.name])  # type: ignore[attr-defined]
    unknown = into_reference(recorded, wanted, float("nan"))  # type: ignore[arg-type]
    assert (unknown is None) == (recorded != wanted.name)  # type: ignore[attr-defined]


# ---------------------------------------------------------------- endurance


def endurance(fails_at: float = np.inf, cycles: int = 40, *, sensitivity_falls: bool = False) -> Trial:
    """Three rows a logged cycle; zero falls by 0.4 pF and sensitivity by 2 % a decade of cycles."""
    number = np.repeat(np.unique(np.round(np.geomspace(1, 20_000, cycles))), 3)
    strain = np.tile([0.0, 0.2, 0.4], len(number) // 3)
    decades = np.log10(number)
    signal = 100.0 - 0.4 * decades + SLOPE * (1 - 0.02 * decades) * strain
    dead = number >= fails_at
    signal = np.where(dead, 90.0 + 5.0 * strain if sensitivity_falls else np.nan, signal)
    base = trial()
    return replace(
        base,
        identity=replace(base.identity, kind="endurance"),
        signal=signal,
        time_s=number * 10.0,
        length_mm=90.0 * (1 + strain),
        strain=strain,
        cycle=number,
    )


def test_zero_and_sensitivity_by_cycle() -> None:
    found = features_of_endurance(endurance())
    assert np.isnan(found.failed_at)
    assert found.last_working == 20_000
    assert found.cycles["zero_signal"].iloc[[0, -1]].tolist() == pytest.approx(
        [100.0, 100.0 - 0.4 * np.log10(2e4)]
    )
    assert found.cycles["sensitivity"].iloc[0] == pytest.approx(SLOPE / 90.0)


@pytest.mark.parametrize("weak", [False, True])
def test_a_sensor_fails_when_it_is_silent_or_weak_for_good(weak: bool) -> None:
    found = features_of_endurance(endurance(3000.0, sensitivity_falls=weak))
    assert found.last_working < 3000.0 <= found.failed_at
    assert found.cycles["cycle"].max() == found.last_working


def test_a_silence_that_ends_is_no_failure() -> None:
    given = endurance()
    signal = given.signal.copy()
    signal[30:60] = np.nan
    assert np.isnan(features_of_endurance(replace(given, signal=signal)).failed_at)


def test_endurance_without_cycles_or_signal_is_told() -> None:
    given = endurance()
    silent = features_of_endurance(replace(given, signal=np.full(len(given.signal), np.nan)))
    assert codes(silent.notices) == {"no-endurance"}
    lost = replace(given, cycle=None, length_mm=None, strain=None)
    assert codes(features_of_endurance(lost).notices) == {"no-endurance"}
