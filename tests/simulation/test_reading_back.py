"""From a plan to files and back: reading makes of simulated logs what was simulated, in both forms."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from campaign.pipeline import read_campaign
from campaign.simulation import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    Plan,
    SampleNoise,
    Settling,
    StandTruth,
    Truth,
    regular_plan,
    sensor_register,
    simulate_readings,
    simulate_recordings,
    write_campaign,
)
from campaign.simulation.recording_text import recording_bytes

COMPONENTS = Components(
    sensor=LineSpread(1.0, 2.0, 0.5),
    shared_run=LineSpread(0.5, 1.0, 0.0),
    repetition=LineSpread(0.2, 0.3, 0.0),
)
QUIET = GenerationTruth(components=COMPONENTS, loop=LoopWidth(0.6, 0.1))
NOISY = GenerationTruth(
    components=COMPONENTS,
    loop=LoopWidth(0.6, 0.1),
    noise=SampleNoise(white=0.02, slow=0.01, slow_correlation=0.5),
    settling=Settling(0.04, 1.0),
)
STAND = StandTruth(build_mm=0.4, length_noise_mm=0.004, rest_length_mm=0.1)
ONE_BY_ONE = """
[recordings]
name = "{module}_{sensor}_{kind}_r{repetition}_s{session}"
kinds = { cal = "staircase" }
"""
SHARED = """
[recordings]
name = "{module}_{kind}_r{repetition}_s{session}"
kinds = { cal = "staircase" }
[[columns]]
header = "stage_{sensor}_mm"
quantity = "length"
unit = "mm"
[[columns]]
header = "capacitance_{sensor}_pF"
quantity = "signal"
unit = "pF"
[[columns]]
header = "ambient_C"
quantity = "temperature"
unit = "°C"
"""
COLUMNS = SHARED[SHARED.index("[[") :].replace("_{sensor}", "")


def _folder(plan: Plan, into: Path, seed: int) -> Path:
    truth = Truth((NOISY,), STAND)
    files = {r.file: recording_bytes(r) for r in simulate_recordings(plan, truth, seed)}
    head = 'format = 1\n[campaign]\ntitle = "Invented"\nsimulated = true\n'
    files["campaign.toml"] = (head + (SHARED if plan.shared_runs else ONE_BY_ONE + COLUMNS)).encode()
    files["sensors.csv"] = sensor_register(plan, truth, seed).to_csv(index=False).encode()
    write_campaign(files, into)
    return into


@pytest.mark.parametrize("shared", [False, True])
def test_readings_of_the_files_are_the_simulated_readings(shared: bool, tmp_path: Path) -> None:
    plan = regular_plan(
        modules=2, sensors=3, sessions=2, repetitions=2, levels=6, descending=True, shared_runs=shared
    )
    found = read_campaign(_folder(plan, tmp_path / "made", 17)).readings.table
    expected = simulate_readings(plan, Truth((QUIET,), STAND), 17)
    keys = ["module", "sensor", "session", "repetition", "trial", "order", "direction"]
    assert found[keys].astype(str).to_numpy().tolist() == expected[keys].astype(str).to_numpy().tolist()
    assert found["strain"].to_numpy() == pytest.approx(expected["strain"].to_numpy(), abs=5e-5)
    assert found["nominal_level"].to_numpy() == pytest.approx(expected["nominal_level"].to_numpy(), abs=5e-4)
    standardised = (found["signal"] - expected["signal"]) / found["standard_error"]
    assert np.sqrt(np.mean(standardised**2)) == pytest.approx(1.0, abs=0.25)


def test_a_shared_run_is_one_file_and_says_whose_columns_are_whose(tmp_path: Path) -> None:
    plan = regular_plan(modules=1, sensors=3, sessions=1, repetitions=2, levels=3, shared_runs=True)
    read = read_campaign(_folder(plan, tmp_path / "made", 3))
    assert read.intake.counts.used == 2
    assert read.intake.counts.trials_used == 6
    assert read.readings.table.groupby("trial")["sensor"].nunique().tolist() == [3, 3]
