"""Reading a reference from a signal: published intervals, and coverage for a new run."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from campaign.methods.calibration_line import fit_polynomial, line_of_runs, run_covariance, t_quantile
from campaign.methods.inverse_reading import (
    INSIDE_CALIBRATION,
    NO_INTERVAL,
    OUTSIDE_CALIBRATION,
    ReadingModel,
    fieller_interval,
    inverse_limits,
    read_reference,
    reading_uncertainty,
)

REFERENCE = Path(__file__).parents[1] / "reference" / "calibration"


def table(name: str) -> pd.DataFrame:
    return pd.read_csv(REFERENCE / name, comment="#")


def line_of(name: str, x: str, y: str):
    data = table(name)
    return fit_polynomial(data[x].to_numpy(float), data[y].to_numpy(float))


def test_thermostat():
    # Graybill and Iyer (1994), as tested in the R package investr: reading 104 at 95 %, 100 at 90 %
    line = line_of("thermostat.csv", "temp", "read")
    found = fieller_interval(line, np.array([104.0]))
    assert [found.estimate, found.low, found.high] == pytest.approx([103.995, 103.4, 104.6], abs=0.05)
    assert found.estimate == pytest.approx(103.995, abs=5e-4)
    found = fieller_interval(line, np.array([100.0]), confidence=0.90)
    assert found.estimate == pytest.approx(100.1, abs=0.05)
    assert [found.low, found.high] == pytest.approx([99.63, 100.59], abs=0.01)


def test_arsenic_one_reading_and_a_mean_response():
    # vignette of the R package investr (R Journal 2014): y0 = 3 at 90 %, by inversion; mean response y0 = 3
    line = line_of("arsenic.csv", "actual", "measured")
    found = fieller_interval(line, np.array([3.0]), confidence=0.90)
    assert [found.estimate, found.low, found.high] == pytest.approx([2.9314, 2.6035, 3.2587], abs=5e-5)
    mean = fieller_interval(line, np.array([3.0]), confidence=0.90, mean_response=True)
    assert [mean.low, mean.high] == pytest.approx([2.8724, 2.9898], abs=5e-5)


def test_arsenic_three_readings_pool_their_scatter():
    # x0 + [(x0 − x̄) g ± (t s/b)√((x0 − x̄)²/Sxx + (1 − g)(1/m + 1/n))]/(1 − g), worked out
    # beside this collection
    line = line_of("arsenic.csv", "actual", "measured")
    found = fieller_interval(line, np.array([3.17, 3.09, 3.16]), confidence=0.90)
    assert [found.estimate, found.low, found.high] == pytest.approx(
        [3.0731913, 2.8843003, 3.2615879], abs=5e-8
    )


# lme4's fit of HD^(3/2) ~ volume, uncorrelated random intercept and slope per subject, from the bladder data
BLADDER = ReadingModel(
    -53.8316338444148,
    69.0949048693515,
    134.633927816352,
    9.69478903056899,
    -6.12593585677938,
    run_var_intercept=39.62494**2,
    run_var_slope=14.28841**2,
    residual_variance=53.7151116202911**2,
)


def test_bladder_with_the_variance_held_at_the_estimate():
    # vignette of investr: 8.015521 (4.227962, 11.91918) at 95 %: var(y0) is held at the point estimate
    found = [float(v) for v in inverse_limits(BLADDER, 500.0, hold_run_variance=True)]
    assert found == pytest.approx([8.015521, 4.227962, 11.91918], rel=2e-5)


def test_bladder_with_the_variance_at_every_volume():
    # ours: re-evaluated at every x, which the same data turn into (5.1506, 14.2004)
    found = [float(v) for v in inverse_limits(BLADDER, 500.0)]
    assert found == pytest.approx([8.015521, 5.1506, 14.2004], rel=2e-5)


def test_nist_calibration_line_uncertainties():
    # NIST/SEMATECH e-Handbook 2.3.6.7, formula and data; u(6) = 0.063664
    line = line_of("nist_calibration_line.csv", "x", "y")
    expected = {2.0: 0.065681, 6.0: 0.063664, 10.0: 0.064741}
    assert {y: reading_uncertainty(line, y) for y in expected} == pytest.approx(expected, abs=5e-7)


def test_pontius_load_from_a_deflection():
    # the straight line is known to lack fit (e-Handbook 4.6.1); the interval must hold its formula's roots
    line = line_of("nist_pontius.csv", "load", "deflection")
    found = fieller_interval(line, np.array([1.239722]))
    t = t_quantile(0.975, line.degrees_of_freedom)
    for x in (found.low, found.high):
        place = np.array([1.0, x])
        variance = line.residual_sd**2 + place @ line.covariance @ place
        assert (1.239722 - line.value(x)) ** 2 == pytest.approx(t**2 * variance, rel=1e-6)


def test_a_slope_not_told_from_zero_has_no_interval():
    model = ReadingModel(1.0, 0.5, 0.01, 0.3, 0.0, residual_variance=0.01, t=2.0)
    found = read_reference(model, 1.2, signal_low=0.0, signal_high=2.0)
    assert found.status == NO_INTERVAL
    assert found.estimate == pytest.approx(0.4)
    assert np.isnan([found.low, found.high]).all()


def test_nothing_is_read_outside_the_calibrated_signals():
    model = ReadingModel(80.0, 70.0, 0.01, 0.01, 0.0, residual_variance=0.01)
    found = read_reference(model, 120.0, signal_low=80.0, signal_high=108.0)
    assert found.status == OUTSIDE_CALIBRATION
    assert np.isnan([found.estimate, found.low, found.high]).all()
    assert read_reference(model, 90.0, signal_low=80.0, signal_high=108.0).status == INSIDE_CALIBRATION


def test_more_readings_in_one_run_only_shrink_the_noise():
    model = ReadingModel(
        80.0, 70.0, 0.02, 0.3, -0.01, 0.05, 0.5, 0.01, lack_of_fit_variance=0.03, residual_variance=0.2
    )
    widths = []
    for readings in (1.0, 10.0, np.inf):
        _, low, high = inverse_limits(model, 94.0, readings)
        widths.append(float(high - low))
    assert widths[0] > widths[1] > widths[2]
    bare = 2 * 1.96 / 70.0 * np.sqrt(0.02 + 0.05 + 0.03)
    assert widths[2] > 0.9 * bare


def test_fieller_interval_for_a_new_run_covers():
    """500 campaigns of 12 sensors with 3 runs; one reading, and a mean of ten, of a new run of one sensor."""
    rng = np.random.default_rng(20261201)
    hits = np.array([_campaign_covers(rng) for _ in range(500)])
    assert 0.92 <= hits[:, 0].mean() <= 0.975
    assert 0.92 <= hits[:, 1].mean() <= 0.975
    # treating the forty readings of three runs as independent claims 95 % and covers far less
    assert hits[:, 2].mean() < 0.91
    assert hits[:, 3].mean() < 0.65


def _campaign_covers(rng: np.random.Generator) -> tuple[bool, bool, bool, bool]:
    sensors, runs, x = 12, 3, np.repeat(np.linspace(0.0, 0.4, 8), 5)
    sigma, centre = 0.3, x.mean()
    true = np.array([95.0, 70.0]) + rng.normal(0.0, [2.0, 3.0], (sensors, 2))
    lines = true[:, None, :] + rng.normal(0.0, [0.3, 0.6], (sensors, runs, 2))
    y = lines[..., :1] + lines[..., 1:] * (x - centre) + rng.normal(0.0, sigma, (sensors, runs, len(x)))
    sxx = float(np.sum((x - centre) ** 2))
    slope = (y * (x - centre)).sum(axis=2) / sxx
    fitted = np.stack([y.mean(axis=2), slope], axis=2)
    residual = y - fitted[..., :1] - fitted[..., 1:] * (x - centre)
    noise = float(np.sum(residual**2)) / (sensors * runs * (len(x) - 2))
    within = noise * np.diag([1.0 / len(x), 1.0 / sxx])
    centred = fitted - fitted.mean(axis=1, keepdims=True)
    degrees = sensors * (runs - 1)
    between = run_covariance(np.einsum("sri,srj->ij", centred, centred) / degrees, within)
    line = line_of_runs(fitted[0], np.tile(within, (runs, 1, 1)), between, centre)
    (a, b), cov, run = line.raw
    model = ReadingModel(
        a, b, cov[0, 0], cov[1, 1], cov[0, 1], run[0, 0], run[1, 1], run[0, 1], 0.0, 0.0, noise,
        t_quantile(0.975, degrees),
    )  # fmt: skip
    ordinary = fit_polynomial(np.tile(x, runs), y[0].ravel())
    strain = rng.uniform(0.05, 0.35)
    new = true[0] + rng.normal(0.0, [0.3, 0.6])
    answers = []
    for count in (1, 10):
        signal = new[0] + new[1] * (strain - centre) + rng.normal(0.0, sigma / np.sqrt(count))
        _, low, high = inverse_limits(model, signal, count)
        plain = ReadingModel(
            *ordinary.coefficients.tolist(), *ordinary.covariance[[0, 1, 0], [0, 1, 1]].tolist(),
            residual_variance=ordinary.residual_sd**2, t=t_quantile(0.975, ordinary.degrees_of_freedom),
        )  # fmt: skip
        _, plain_low, plain_high = inverse_limits(plain, signal, count)
        answers.append((bool(low <= strain <= high), bool(plain_low <= strain <= plain_high)))
    return answers[0][0], answers[1][0], answers[0][1], answers[1][1]
