"""Noise that is uneven or not independent is found; even noise is let be."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods import within_run_noise
from campaign.methods.component_tests import tabulate_runs
from campaign.methods.identifiability import code_units
from campaign.methods.within_run_noise import NoiseCheck, check_noise
from campaign.simulation.plan import regular_plan
from campaign.simulation.readings import simulate_readings
from campaign.simulation.truth import Components, GenerationTruth, LineSpread, Truth


def check(seed: int, scale: float = 1.0, **noise: float) -> NoiseCheck:
    parts = Components(sensor=LineSpread(0.8, 1.0), sensor_by_level=0.2, residual=0.1, **noise)
    plan = regular_plan(modules=4, sensors=4, repetitions=3, levels=8)
    readings = simulate_readings(plan, Truth(generations=(GenerationTruth(components=parts),)), seed)
    units = code_units(readings)
    table = tabulate_runs(units, readings["x"].to_numpy(), line=True)
    order = readings["order"].to_numpy(np.int64)
    return check_noise(table, order, scale * readings["signal"].to_numpy(), np.random.default_rng(seed))


def test_even_noise_has_no_faults_and_its_own_sd() -> None:
    checks = [check(seed) for seed in range(12)]
    assert [c.faults for c in checks] == [()] * 12
    assert np.mean([c.by_level["sd"].mean() for c in checks]) == pytest.approx(0.1, rel=0.04)
    assert np.mean([c.autocorrelation for c in checks]) == pytest.approx(0.0, abs=0.05)


def test_noise_that_grows_with_strain_is_uneven() -> None:
    found = check(1, residual_growth=2.0)
    assert "uneven over levels" in found.faults
    assert found.by_level["sd"].iloc[-1] > 2 * found.by_level["sd"].iloc[0]


def test_noise_that_remembers_is_autocorrelated() -> None:
    found = check(2, residual_correlation=0.7)
    assert "autocorrelated" in found.faults
    assert found.autocorrelation > 0.2


def test_units_do_not_matter() -> None:
    plain, scaled = check(3), check(3, scale=1000.0)
    assert scaled.level_ratio == pytest.approx(plain.level_ratio)
    assert scaled.autocorrelation == pytest.approx(plain.autocorrelation)
    assert scaled.by_level["sd"].to_numpy() == pytest.approx(1000 * plain.by_level["sd"].to_numpy())


def test_noise_looked_at_in_parts_is_the_noise_looked_at_whole(monkeypatch: pytest.MonkeyPatch) -> None:
    whole = check(4)
    monkeypatch.setattr(within_run_noise, "_AT_ONCE", 1)
    parts = check(4)
    assert parts.level_p == whole.level_p
    assert parts.sensor_p == whole.sensor_p
    assert parts.sensor_ratio == pytest.approx(whole.sensor_ratio, rel=1e-12)
    assert parts.autocorrelation == pytest.approx(whole.autocorrelation, rel=1e-9)
    assert parts.by_level["sd"].to_numpy() == pytest.approx(whole.by_level["sd"].to_numpy(), rel=1e-12)
