"""Cyclic trials with known truth, made in memory: what analyses of loops are held to."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from campaign.recordings.recording import Trial, TrialIdentity
from campaign.recordings.sensor_share import TrialKey
from campaign.trials.cyclic import CyclicFeatures, features_of_cyclic

SLOPE, ZERO, AMPLITUDE = 50.0, 100.0, 0.4
"""pF per unit strain, pF, mm/mm: full-scale output 20 pF where there is no staircase."""


@dataclass(frozen=True)
class Truth:
    """Widths in pF: signal up less signal down, the same all along the range."""

    width: float = 1.0
    module_sd: float = 0.2
    sensor_sd: float = 0.2
    run_sd: float = 0.1
    noise: float = 0.05
    softening: float = 0.0
    delay_s: float = 0.0


def cyclic_trial(
    truth: Truth,
    rng: np.random.Generator,
    *,
    width: float | None = None,
    module: str = "M01",
    sensor: str = "AB",
    repetition: int = 1,
    period_s: float = 10.0,
    cycles: int = 8,
    samples: int = 100,
    generation: str = "g1",
    rest_length_mm: float = 90.0,
) -> Trial:
    """A triangle wave with a parallelogram of a loop, softening over the first cycles, noise and a delay."""
    width = truth.width if width is None else width
    time = np.arange(cycles * samples + 1) * period_s / samples
    phase = time / period_s
    strain = AMPLITUDE * (1.0 - np.abs(2.0 * (phase % 1.0) - 1.0))
    late = (time - truth.delay_s) / period_s
    felt = AMPLITUDE * (1.0 - np.abs(2.0 * (late % 1.0) - 1.0))
    rising = (phase % 1.0) < 0.5
    soft = 1.0 + truth.softening * np.exp(-np.floor(phase))
    signal = ZERO + SLOPE * felt * soft + np.where(rising, 0.5, -0.5) * width
    identity = TrialIdentity(
        file=f"{module}_{sensor}_{period_s:g}s_r{repetition}.csv",
        kind="cyclic",
        generation=generation,
        batch="",
        module=module,
        sensor=sensor,
        position=sensor,
        repetition=repetition,
        session="",
        started="",
        channel="",
        rest_length_mm=rest_length_mm,
        rest_length_uncertainty_mm=0.1,
    )
    length = rest_length_mm * (1.0 + strain)
    return Trial(
        identity=identity,
        signal=signal + rng.normal(0.0, truth.noise, len(signal)),
        signal_unit="pF",
        time_s=time,
        length_mm=length,
        strain=strain,
        reference="length",
    )


def cyclic_campaign(
    truth: Truth,
    seed: int,
    *,
    modules: int = 4,
    sensors: int = 3,
    runs: int = 2,
    periods: tuple[float, ...] = (10.0,),
    cycles: int = 8,
    samples: int = 100,
) -> Mapping[TrialKey, CyclicFeatures]:
    """Modules × sensors × runs × rates, widths drawn about the truth."""
    rng = np.random.default_rng(seed)
    found: dict[TrialKey, CyclicFeatures] = {}
    for m in range(modules):
        of_module = rng.normal(0.0, truth.module_sd)
        for s in range(sensors):
            of_sensor = truth.width + of_module + rng.normal(0.0, truth.sensor_sd)
            for r in range(runs):
                for period in periods:
                    trial = cyclic_trial(
                        truth,
                        rng,
                        width=of_sensor + rng.normal(0.0, truth.run_sd),
                        module=f"M{m + 1:02}",
                        sensor="ABCDEF"[s],
                        repetition=r + 1,
                        period_s=period,
                        cycles=cycles,
                        samples=samples,
                    )
                    found[trial.file, trial.identity.sensor, r + 1] = features_of_cyclic(trial)
    return found
