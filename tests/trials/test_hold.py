"""Holds: where they begin, what is read at which time, envelopes that lose no spike, and notices."""

import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.hold import (
    features_of_blank,
    features_of_hold,
    log_time_envelope,
    log_time_means,
)
from campaign.trials.hold_course import find_holds, find_kept_lengths

REST_MM = 60.0


def identity(kind: str = "hold") -> TrialIdentity:
    return TrialIdentity("trials/a.csv", kind, "first", "", "M01", "AB", "AB", 1, "S1", "", "", REST_MM, 0.1)


def hold_trial(
    *,
    before: float = 60.0,
    ramp: float = 5.0,
    hold: float = 3600.0,
    after: float = 120.0,
    stretch: float = 12.0,
    interval: float = 0.5,
    noise: float = 0.002,
    temperature: float | None = 23.0,
    step_k: float = 0.0,
    zero_shift: float = 0.0,
    signal_of=lambda t: -0.05 * np.log1p(t / 5.0),
    seed: int = 0,
) -> Trial:
    """A length that rises, is kept, and comes back; the signal follows it and relaxes while it is kept."""
    rng = np.random.default_rng(seed)
    marks = np.cumsum([0.0, before, ramp, hold, ramp, after])
    t = np.arange(0.0, marks[-1], interval)
    elongation = np.interp(t, marks, [0.0, 0.0, stretch, stretch, 0.0, 0.0])
    kept = (t >= marks[2]) & (t <= marks[3])
    signal = 20.0 + 0.5 * elongation + np.where(kept, signal_of(np.maximum(t - marks[2], 0.0)), 0.0)
    signal = signal + np.where(t > marks[4], zero_shift, 0.0) + noise * rng.normal(size=len(t))
    warm = None if temperature is None else temperature + step_k * (t > marks[-1] / 2)
    return Trial(
        identity(),
        signal,
        "pF",
        time_s=t,
        length_mm=REST_MM + elongation,
        elongation_mm=elongation,
        strain=elongation / REST_MM,
        temperature_c=warm,
    )


def codes(features) -> list[str]:
    return [notice.code for notice in features.notices]


def test_time_zero_is_the_end_of_the_ramp():
    (hold,) = features_of_hold(hold_trial()).holds
    assert hold.ramp_s == pytest.approx(5.0, abs=0.6)
    assert hold.duration_s == pytest.approx(3600.0, abs=1.0)
    assert (hold.place, hold.kept) == ("stretched", "length")
    assert hold.kept_strain == pytest.approx(0.2, abs=1e-4)
    assert hold.stretches.starts_s[0] == pytest.approx(0.5)


def test_signals_are_read_at_their_times():
    (hold,) = features_of_hold(hold_trial(noise=0.0)).holds
    for name, at in (("1 min", 60.0), ("10 min", 600.0), ("30 min", 1800.0)):
        assert hold.signals[name].mean == pytest.approx(26.0 - 0.05 * np.log1p(at / 5.0), abs=4e-4)
        assert hold.signals[name].start_s >= 0.95 * at - 1e-9
        assert hold.signals[name].stop_s <= 1.05 * at + 1e-9
    assert hold.signals["1 h"].count > 0
    assert 5.0 <= hold.first.start_s <= hold.first.stop_s <= 10.5


def test_a_time_beyond_the_record_is_not_given():
    (hold,) = features_of_hold(hold_trial(hold=900.0)).holds
    assert np.isnan(hold.signals["1 h"].mean)
    assert hold.signals["10 min"].count > 0


def test_zero_return_needs_the_same_length_before_and_after():
    features = features_of_hold(hold_trial(zero_shift=0.04, noise=0.001))
    (hold,) = features.holds
    assert hold.zero_after.mean - hold.zero_before.mean == pytest.approx(0.04, abs=0.002)
    assert "no-return-to-zero" not in codes(features)
    without = features_of_hold(hold_trial(after=0.0))
    assert np.isnan(without.holds[0].zero_after.mean)
    assert "no-return-to-zero" in codes(without)


def test_two_lengths_in_one_recording_are_two_holds():
    t = np.arange(0.0, 4100.0, 1.0)
    elongation = np.interp(t, [0, 30, 34, 2000, 2004, 4100], [0, 0, 10, 10, 20, 20])
    trial = Trial(
        identity(), 20.0 + elongation, "pF", time_s=t, length_mm=60 + elongation, strain=elongation / 60
    )
    holds = features_of_hold(trial).holds
    assert [round(h.kept_strain, 3) for h in holds] == [0.167, 0.333]


@pytest.mark.parametrize(
    ("temperature", "step", "state"),
    [(None, 0.0, "not recorded"), (23.0, 0.0, "steady"), (23.0, 2.0, "not steady")],
)
def test_temperature_is_told_steady_moving_or_absent(temperature, step, state):
    features = features_of_hold(hold_trial(temperature=temperature, step_k=step))
    assert features.holds[0].temperature.state == state
    expected = {"not recorded": "temperature-not-recorded", "not steady": "temperature-not-steady"}
    assert (expected.get(state) in codes(features)) == (state != "steady")


def test_a_hold_at_rest_has_an_allan_deviation_and_a_stretched_one_has_none():
    rest = features_of_hold(hold_trial(stretch=0.0, signal_of=lambda t: 0.0 * t)).holds[0]
    assert rest.place == "rest"
    assert rest.floors is not None
    assert rest.floors.white == pytest.approx(0.002 * np.sqrt(0.5), rel=0.05)
    assert features_of_hold(hold_trial()).holds[0].allan is None


def test_uneven_sampling_at_rest_gives_a_notice_in_place_of_an_allan_deviation():
    rng = np.random.default_rng(2)
    t = np.cumsum(rng.uniform(0.2, 2.0, 500))
    flat = np.zeros(500)
    trial = Trial(identity(), 20.0 + rng.normal(size=500), "pF", time_s=t, elongation_mm=flat, strain=flat)
    features = features_of_hold(trial)
    assert features.holds[0].allan is None
    assert "not-evenly-sampled" in codes(features)


def test_a_kept_force_is_told_from_a_kept_length():
    t = np.arange(0.0, 600.0, 1.0)
    force = np.interp(t, [0, 20, 30, 600], [0, 0, 5, 5])
    length = 60.0 + np.interp(t, [0, 20, 30, 600], [0, 0, 10, 13])
    trial = Trial(identity(), length, "pF", time_s=t, length_mm=length, strain=length / 60 - 1, force_n=force)
    assert features_of_hold(trial).holds[0].kept == "force"


def test_no_length_at_all_is_one_hold_from_the_first_sample():
    t = np.arange(0.0, 151.0, 0.1)
    features = features_of_hold(Trial(identity(), 730.0 * np.exp(-t / 9e4), "kPa", time_s=t))
    (hold,) = features.holds
    assert (hold.place, hold.kept) == ("unknown", "unknown")
    assert np.isnan(hold.ramp_s)
    assert hold.duration_s == pytest.approx(150.9)


def test_a_sine_is_no_hold():
    t = np.arange(0.0, 600.0, 1.0)
    moving = 10.0 * np.sin(t / 20.0)
    features = features_of_hold(Trial(identity(), moving, "pF", time_s=t, elongation_mm=moving))
    assert features.holds == ()
    assert codes(features) == ["no-hold"]


@pytest.mark.parametrize(
    ("changed", "code"),
    [
        ({"time_s": None}, "hold-without-time"),
        ({"time_is_ordered": False}, "hold-without-time"),
        ({"signal": np.full(8206, np.nan)}, "hold-too-short"),
    ],
)
def test_what_cannot_be_used_is_said(changed, code):
    trial = hold_trial()
    broken = {**vars(trial), **changed}
    if "signal" in changed:
        broken["signal"] = np.full(len(trial.signal), np.nan)
    features = features_of_hold(Trial(**broken))
    assert features.holds == ()
    assert codes(features) == [code]


def test_gaps_clipping_missing_values_and_short_holds_are_noted():
    trial = hold_trial(ramp=20.0, hold=300.0)
    keep = np.ones(len(trial.signal), dtype=bool)
    keep[400:460] = False
    signal = np.minimum(trial.signal, np.quantile(trial.signal, 0.8))
    signal[::97] = np.nan
    columns = ("time_s", "length_mm", "elongation_mm", "strain", "temperature_c")
    cut = {name: getattr(trial, name)[keep] for name in columns}
    found = codes(features_of_hold(Trial(identity(), signal[keep], "pF", **cut)))
    assert {"time-gaps", "clipped", "missing-values", "hold-too-short"} <= set(found)


def test_a_blank_channel_is_a_hold_at_rest_whatever_the_stage_did():
    trial = hold_trial(signal_of=lambda t: 0.0 * t)
    blank = Trial(**{**vars(trial), "identity": identity("blank"), "signal": trial.signal * 0 + 1.5})
    (hold,) = features_of_blank(blank).holds
    assert hold.place == "rest"
    assert hold.means == pytest.approx(1.5)


def test_a_hold_of_100_000_samples_is_reduced_quickly():
    trial = hold_trial(hold=99_000.0, interval=1.0, stretch=0.0, signal_of=lambda t: 0.0 * t)
    begun = time.perf_counter()
    (hold,) = features_of_hold(trial).holds
    assert time.perf_counter() - begun < 5.0
    assert len(hold.envelope.times_s) <= 520
    assert len(hold.means) < 200


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(20, 3000), st.integers(1, 19))
def test_the_envelope_loses_no_spike_and_means_keep_the_sum(seed, count, place):
    rng = np.random.default_rng(seed)
    t = np.cumsum(rng.uniform(0.1, 1.0, count))
    values = rng.normal(size=count)
    values[place] = 1e3
    drawn = log_time_envelope(t, values)
    assert drawn.high.max() == 1e3
    assert drawn.low.min() == values.min()
    assert (np.diff(drawn.times_s) > 0).all()
    stretches, means = log_time_means(t, values)
    assert stretches.counts.sum() == count
    assert means @ stretches.counts == pytest.approx(values.sum())


@settings(max_examples=20, deadline=None)
@given(
    st.floats(0.0, 0.02),
    st.integers(20, 300),
    st.integers(2, 60),
    st.integers(800, 3000),
    st.integers(0, 10**6),
)
def test_the_longest_kept_length_is_found_under_noise(noise, before, ramp, hold, seed):
    clean = np.concatenate([np.zeros(before), np.linspace(0, 10, ramp), np.full(hold, 10.0)])
    reference = clean + noise * np.random.default_rng(seed).normal(size=len(clean))
    (course,) = find_holds(reference)
    assert course.kept.level == pytest.approx(10.0, abs=0.02)
    assert abs(course.kept.start - (before + ramp)) <= 2 + 0.02 * ramp
    assert course.before is not None
    assert find_kept_lengths(np.zeros(0)) == ()
