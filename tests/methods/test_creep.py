"""Forms of slow change on simulated truth, their intervals, the choice among them, and what they refuse."""

import numpy as np
import pytest
from scipy import signal, stats

from campaign.methods.block_noise import BlockNoise, Stretches, find_block_noise, slow_correlation
from campaign.methods.creep import (
    EXTRAPOLATION_LIMIT,
    fit_creep,
    middle_times,
    slope_per_decade,
    smooth_columns,
)

TIMES = np.arange(1, 18_001) * 0.2
"""An hour at 5 samples a second."""


def slow(rng: np.random.Generator, memory_s: float) -> np.ndarray:
    """Noise of SD 1 that forgets exponentially."""
    kept = np.exp(-(TIMES[1] - TIMES[0]) / memory_s)
    start = signal.lfiltic([1.0], [1.0, -kept], [rng.normal()])
    made, _ = signal.lfilter([np.sqrt(1 - kept**2)], [1.0, -kept], rng.normal(size=len(TIMES)), zi=start)
    return made


def means(values: np.ndarray, a_decade: int = 20) -> tuple[Stretches, np.ndarray]:
    buckets = np.floor(np.log10(TIMES / TIMES[0]) * a_decade)
    first = np.concatenate([[0], np.flatnonzero(np.diff(buckets)) + 1])
    counts = np.diff(np.append(first, len(TIMES)))
    stretches = Stretches(TIMES[first], TIMES[first + counts - 1], counts)
    return stretches, np.add.reduceat(values, first) / counts


def logarithmic(t):
    return 0.5 * np.log1p(t / 5.0)


def stretched(t):
    return 2.0 * (1.0 - np.exp(-((t / 200.0) ** 0.6)))


@pytest.mark.parametrize(
    ("truth", "name", "shapes"),
    [(logarithmic, "logarithmic", [5.0]), (stretched, "stretched exponential", [200.0, 0.6])],
)
def test_forms_are_recovered_with_intervals_that_cover(truth, name, shapes):
    """Shapes and the change from 1 min to 1 h, under white and slow noise, in 20 simulated holds."""
    shown, covered = 0, []
    for seed in range(20):
        rng = np.random.default_rng(seed)
        values = 10.0 + truth(TIMES) + 0.02 * rng.normal(size=len(TIMES)) + 0.02 * slow(rng, 60.0)
        found = fit_creep(*means(values))
        shown += name in [form.name for form in found.shown]
        form = next(f for f in found.fits if f.name == name)
        limits = [form.shape_interval(place) for place in range(len(shapes))]
        hits = [low < shape < high for (_, low, high), shape in zip(limits, shapes, strict=True)]
        change, error = form.change(60.0, 3600.0)
        reach = stats.t.ppf(0.975, form.fit.degrees_of_freedom) * error
        covered.append([*hits, abs(change - truth(3600.0) + truth(60.0)) < reach])
    assert shown >= 17
    assert np.sum(covered, axis=0).min() >= 16


def test_slope_a_decade_is_recovered_within_its_interval_over_100_seeds():
    """Logarithmic creep of 0.3 a decade under slow noise, from where 1 + t/τ is t/τ."""
    covered, ordinary = 0, 0
    for seed in range(100):
        rng = np.random.default_rng(seed)
        values = 0.3 * np.log10(TIMES) + 0.05 * rng.normal(size=len(TIMES)) + 0.02 * slow(rng, 100.0)
        stretches, averaged = means(values, 12)
        noise = find_block_noise(smooth_columns(middle_times(stretches)), averaged, stretches)
        slope, error, freedom = slope_per_decade(stretches, averaged, noise)
        covered += abs(slope - 0.3) < stats.t.ppf(0.975, freedom) * error
        line = stats.linregress(np.log10(middle_times(stretches)), averaged)
        ordinary += abs(line.slope - 0.3) < 1.96 * line.stderr
    assert covered >= 88
    assert covered > ordinary - 5


def test_whitening_inverts_the_covariance():
    rng = np.random.default_rng(0)
    edges = np.sort(rng.uniform(0, 100, 24))
    stretches = Stretches(edges[0::2], edges[1::2], rng.integers(1, 50, 12))
    for noise in (BlockNoise(2.0, 3.0, 4.0), BlockNoise(0.5, 0.0, float("nan"))):
        whitening = noise.whitening(stretches)
        assert whitening @ noise.covariance(stretches) @ whitening.T == pytest.approx(np.eye(12), abs=1e-10)


def test_slow_correlation_is_the_mean_over_both_stretches():
    stretches = Stretches(np.array([1.0, 4.0]), np.array([3.0, 9.0]), np.array([1, 1]))
    first, second = np.linspace(1, 3, 801), np.linspace(4, 9, 801)
    by_sum = np.mean(np.exp(-np.abs(first[:, None] - second[None, :]) / 2.5))
    assert slow_correlation(stretches, 2.5)[0, 1] == pytest.approx(by_sum, rel=1e-3)


@pytest.fixture(scope="module")
def settling():
    rng = np.random.default_rng(3)
    return fit_creep(*means(5.0 - 1.5 * np.exp(-TIMES / 120.0) + 0.005 * rng.normal(size=len(TIMES))))


def test_an_exponential_settles_into_a_band(settling):
    """1.5 exp(−t/120) falls below 0.01 at 120 ln 150 = 601 s."""
    best = settling.best
    assert best.name in ("Prony 1", "stretched exponential")
    assert best.final_value() == pytest.approx(5.0, abs=0.002)
    assert best.settling_time(0.01) == pytest.approx(120.0 * np.log(150.0), rel=0.03)
    assert best.settling_time(10.0) == 0.0


def test_a_logarithm_never_settles_and_nothing_is_given_far_beyond_the_record(settling):
    rng = np.random.default_rng(4)
    found = fit_creep(*means(logarithmic(TIMES) + 0.01 * rng.normal(size=len(TIMES))))
    form = next(f for f in found.fits if f.name == "logarithmic")
    assert np.isnan(form.final_value())
    assert np.isnan(form.settling_time(0.1))
    end = form.longest_s
    assert form.change(end, 10.0 * end)[0] == pytest.approx(0.5 * np.log(10.0), rel=0.02)
    beyond = np.array([1.01 * EXTRAPOLATION_LIMIT * end])
    assert np.isnan(form.curve(beyond)).all()
    assert np.isnan(form.standard_errors(beyond)).all()


def test_a_short_or_dead_hold_gives_no_form():
    stretches, values = means(logarithmic(TIMES))
    few = Stretches(stretches.starts_s[:8], stretches.stops_s[:8], stretches.counts[:8])
    assert fit_creep(few, values[:8]) is None
    assert fit_creep(stretches, np.full(len(values), 3.0)) is None


def test_series_whose_times_run_together_are_left_out(settling):
    for form in settling.fits:
        if form.name in ("Prony 2", "Prony 3"):
            times = np.sort(form.fit.shape)
            assert (times[1:] / times[:-1] >= 1.5).all()
