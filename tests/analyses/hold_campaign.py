"""Holds with known truth, made in memory: what analyses of time are held to."""

from __future__ import annotations

import numpy as np
import pandas as pd

from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN, Trial, TrialIdentity
from campaign.recordings.sensor_share import TrialKey
from campaign.simulation import GenerationTruth, SignalLaw, Truth, regular_plan, simulate_readings
from campaign.trials.hold import HoldFeatures, features_of_blank, features_of_hold
from campaign.trials.readings import Readings

RATED = Description("invented", range_strain=0.40, limits={"drift_1h": (1.0, "%FSO")})
NO_REGISTER = pd.DataFrame(columns=["module", "sensor"])


def calibration_of(
    modules: int = 3, sensors: int = 2, sessions: int = 1, seed: int = 1, **truth: object
) -> Calibration:
    """Lines of simulated sensors, almost without noise."""
    plan = regular_plan(modules=modules, sensors=sensors, repetitions=2, levels=5, sessions=sessions)
    law = SignalLaw(parasitic=0.0, per_mm=1.0)
    readings = simulate_readings(plan, Truth((GenerationTruth(law=law, **truth),)), seed)  # type: ignore[arg-type]
    return analyse_calibration(Readings(readings, STRAIN), RATED, NO_REGISTER, {})


def identity(module: str, sensor: str, repetition: int = 1, kind: str = "hold") -> TrialIdentity:
    file = f"trials/{module}_{sensor}_{kind}_r{repetition}.csv"
    who = ("gen", "", module, sensor, sensor, repetition, "", "", "")
    return TrialIdentity(file, kind, *who, 60.0, 0.1)  # type: ignore[arg-type]


def hold(
    who: TrialIdentity,
    rng: np.random.Generator,
    *,
    strain: float = 0.2,
    per_decade: float = -0.2,
    noise: float = 0.005,
    temperature: float | None = 23.0,
    step_k: float = 0.0,
    per_kelvin: float = 0.1,
    slope_per_s: float = 0.0,
    duration: float = 3800.0,
    level: float = 100.0,
) -> tuple[TrialKey, HoldFeatures]:
    """A hold that changes by *per_decade* (pF) times log₁₀(1 + t), t in s, read every second after a ramp."""
    t = np.arange(0.0, duration + 32.0)
    x = np.interp(t, [0.0, 30.0, 32.0], [0.0, 0.0, strain]) if strain else np.zeros(len(t))
    since = np.maximum(t - 32.0, 0.0) if strain else t
    warm = (temperature or 0.0) + step_k * (t > duration / 2)
    signal = level * (1.0 + x) + per_decade * np.log10(1.0 + since) + slope_per_s * since
    signal = signal + per_kelvin * (warm - warm[0]) + noise * rng.normal(size=len(t))
    trial = Trial(
        who,
        signal,
        "pF",
        time_s=t,
        length_mm=60.0 * (1.0 + x),
        elongation_mm=60.0 * x,
        strain=x,
        temperature_c=None if temperature is None else warm,
    )
    reduce = features_of_blank if who.kind == "blank" else features_of_hold
    return (who.file, who.sensor, who.repetition), reduce(trial)
