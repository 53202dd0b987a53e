"""Small invented campaigns, written as folders and read by the same road as a lab's own."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.analyses.results import CampaignResults
from campaign.pipeline import analyse, read_campaign
from campaign.recordings.intake import Intake

LEVELS = (0.0, 0.1, 0.2, 0.3, 0.4)


@dataclass(frozen=True)
class Sketch:
    """What a small campaign holds; ids may be anything."""

    generations: tuple[str, ...] = ("first", "second")
    modules: int = 3
    sensors: tuple[str, ...] = ("AB", "BC")
    sessions: int = 2
    runs: int = 2
    both_branches: bool = True
    rest_length: bool = True
    limits: str = (
        'linearity = "2 %FSO"\nhysteresis = "5 %FSO"\nrepeatability = "1 %FSO"\nstrain_error = "0.02"'
    )
    set_aside: str = ""
    module_name: str = "M{number}"


def write_campaign(folder: Path, sketch: Sketch, seed: int = 5) -> Path:
    """Write the campaign's folder and return it."""
    generator = np.random.default_rng(seed)
    (folder / "trials").mkdir(parents=True)
    modules, sensors, trials = ["module,generation"], ["module,sensor,rest_length,fate,reason"], []
    number = 0
    for generation in sketch.generations:
        for _ in range(sketch.modules):
            number += 1
            module = sketch.module_name.format(number=number)
            modules.append(f'"{module}",{generation}')
            for sensor in sketch.sensors:
                aside = f"{module} {sensor}" == sketch.set_aside
                length = "60 mm" if sketch.rest_length else ""
                sensors.append(f'"{module}","{sensor}",{length},{"set aside,torn" if aside else ","}')
                trials += _write_runs(folder, sketch, module, sensor, generator, len(trials), torn=aside)
    head = "file,kind,module,sensor,session,repetition"
    _write(folder / "modules.csv", modules)
    _write(folder / "sensors.csv", sensors)
    _write(folder / "trials.csv", [head, *trials])
    limits = f"[limits]\n{sketch.limits}\n" if sketch.limits else ""
    reach = "[range]\nstrain = 0.4\n" if sketch.rest_length else ""
    quantity = "length" if sketch.rest_length else "elongation"
    (folder / "campaign.toml").write_text(
        'format = 1\n[campaign]\ntitle = "Small invented panels"\n[[columns]]\nheader = "x_mm"\n'
        f'quantity = "{quantity}"\nunit = "mm"\n[[columns]]\nheader = "C"\nquantity = "signal"\nunit = "pF"\n'
        f"{reach}{limits}",
        encoding="utf-8",
    )
    return folder


def _write(path: Path, lines: list[str]) -> None:
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def _write_runs(
    folder: Path,
    sketch: Sketch,
    module: str,
    sensor: str,
    generator: np.random.Generator,
    first: int,
    *,
    torn: bool,
) -> list[str]:
    own = generator.normal(0, 0.03, 2)
    rows = []
    for session in range(1, sketch.sessions + 1):
        mounting = generator.normal(0, 0.003, 2)
        for repetition in range(1, sketch.runs + 1):
            name = f"trials/run_{first + len(rows):03d}.csv"
            run = generator.normal(0, 0.002, 2)
            _write(folder / name, _table(sketch, own + mounting + run, generator, torn=torn))
            mounted = session if sketch.sessions > 1 else ""
            rows.append(f'{name},staircase,"{module}","{sensor}",{mounted},{repetition}')
    return rows


def _table(sketch: Sketch, effect: np.ndarray, generator: np.random.Generator, *, torn: bool) -> list[str]:
    up = list(LEVELS)
    visits = [(x, 0.1) for x in up] + ([(x, -0.1) for x in up[-2::-1]] if sketch.both_branches else [])
    start = 60.0 if sketch.rest_length else 0.0
    lines = ["x_mm,C"]
    for strain, branch in visits:
        signal = 50 * (1 + effect[0] + (0.9 + effect[1]) * strain - 0.05 * strain**2)
        signal += branch * 4 * strain * (0.4 - strain) / 0.16 + generator.normal(0, 0.02)
        lines.append(f"{start + 60 * strain:.4f},{generator.normal(20, 9) if torn else signal:.5f}")
    return lines


def small_results(folder: Path, sketch: Sketch, seed: int = 5) -> CampaignResults:
    """Write, read and analyse a small campaign."""
    return analyse(read_campaign(write_campaign(folder, sketch, seed)))


def read_and_calibrate(folder: Path) -> tuple[Intake, Calibration]:
    """Read a campaign folder and calibrate its sensors, no more."""
    read = read_campaign(folder)
    intake = read.intake
    return intake, analyse_calibration(read.readings, intake.description, intake.sensors, intake.file_hashes)
