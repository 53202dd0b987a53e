"""Campaigns with layout trials and known truth, written as files and read back: what layout is held to."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import combinations
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd

from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.analyses.layout import analyse_layout
from campaign.analyses.layout_results import Layout
from campaign.analyses.variance_fit import choose_places, fit_generation
from campaign.analyses.variance_model import build_model
from campaign.pipeline import CampaignRead, read_campaign
from campaign.recordings.description import Description
from campaign.recordings.sensor_share import TrialKey
from campaign.simulation import (
    Components,
    GenerationTruth,
    LayoutPlan,
    LayoutTruth,
    LineSpread,
    LoopWidth,
    Plan,
    SampleNoise,
    SignalLaw,
    StandTruth,
    Truth,
    panel_places,
    placed,
    regular_plan,
    simulate_recordings,
    write_campaign,
)
from campaign.simulation.recording_text import recording_bytes
from campaign.simulation.registers import modules_text, sensors_text
from campaign.trials.layout import LayoutFeatures

PANEL = {"A": (0.0, 0.0), "B": (96.0, 0.0), "C": (88.0, 62.0), "D": (10.0, 58.0)}
BRACED = {"P": (0.0, 0.0), "Q": (80.0, 0.0), "R": (100.0, 55.0), "S": (42.0, 92.0), "T": (-16.0, 52.0)}
SEATED = 0.4
NODE = 0.1

DESCRIPTION = """
format = 1
[campaign]
title = "Invented"
simulated = true
[recordings]
name = ["{module}_{sensor}_{kind}_r{repetition}_s{session}", "{module}_{kind}_r{repetition}_s{session}"]
kinds = { cal = "staircase" }
[[columns]]
header = "{node}_x_mm"
quantity = "node_x"
unit = "mm"
[[columns]]
header = "{node}_y_mm"
quantity = "node_y"
unit = "mm"
[[columns]]
header = "stage_{sensor}_mm"
quantity = "length"
unit = "mm"
[[columns]]
header = "capacitance_{sensor}_pF"
quantity = "signal"
unit = "pF"
[[columns]]
header = "stage_mm"
quantity = "length"
unit = "mm"
[[columns]]
header = "capacitance_pF"
quantity = "signal"
unit = "pF"
[[columns]]
header = "ambient_C"
quantity = "temperature"
unit = "°C"
[reference]
length = { scale = "0.0003", zero = "0.03 mm" }
node = "0.1 mm"
[range]
strain = 0.40
[limits]
node_error = "2 mm"
"""


@dataclass(frozen=True)
class Laid:
    """A campaign as read, its lines and fits, and what layout made of it."""

    read: CampaignRead
    calibration: Calibration
    variance: SimpleNamespace
    layout: Layout

    @property
    def description(self) -> Description:
        return self.read.intake.description

    @property
    def features(self) -> dict[TrialKey, LayoutFeatures]:
        return self.read.of_type(LayoutFeatures)

    def again(
        self,
        features: Mapping[TrialKey, LayoutFeatures] | None = None,
        description: Description | None = None,
        sensors: pd.DataFrame | None = None,
    ) -> Layout:
        """What layout makes of it with something changed."""
        intake = self.read.intake
        found = analyse_layout(
            self.features if features is None else features,
            self.calibration,
            self.variance,  # type: ignore[arg-type]
            None,
            description or self.description,
            (intake.modules, intake.sensors if sensors is None else sensors),
        )
        assert found is not None
        return found

    def with_signals(self, change: float, sensor: str, placement: str, module: str = "M01") -> Layout:
        """The same with one signal of one placement changed by *change* mm of length; NaN takes it away."""
        changed = {}
        for key, own in self.features.items():
            if (own.identity.module, own.identity.sensor) == (module, sensor):
                signal = own.signal.copy()
                signal[own.names.index(placement)] += 0.8 * change
                own = replace(own, signal=signal)
            changed[key] = own
        return self.again(without_nan(changed))


def without_nan(features: dict[TrialKey, LayoutFeatures]) -> dict[TrialKey, LayoutFeatures]:
    """Leave out the placements of a sensor that have no signal, as reading does."""
    found = {}
    for key, own in features.items():
        keep = np.flatnonzero(np.isfinite(own.signal))
        found[key] = replace(
            own,
            names=tuple(own.names[k] for k in keep),
            signal=own.signal[keep],
            standard_error=own.standard_error[keep],
            count=own.count[keep],
            known_length_mm=own.known_length_mm[keep],
            known_mm=own.known_mm[keep],
            temperature_c=own.temperature_c[keep],
        )
    return found


def placements_of(nodes: dict[str, tuple[float, float]]) -> tuple[tuple[tuple[float, float], ...], ...]:
    """Larger, longer, higher, sheared."""
    return (
        placed(nodes, 1.05, 1.05),
        placed(nodes, 1.30, 1.10),
        placed(nodes, 1.10, 1.30),
        placed(nodes, 1.20, 1.20, shear=0.10),
    )


def plan_of(
    nodes: dict[str, tuple[float, float]], modules: int, *, shared: bool, repetitions: int = 1
) -> Plan:
    """Staircases of all sensors, and one layout run a module."""
    plan = regular_plan(
        modules=modules, sensors=2, sessions=2, repetitions=2, levels=5, shared_runs=shared, descending=True
    )
    return replace(
        plan,
        places=panel_places(nodes, tuple(combinations(nodes, 2))),
        layout=LayoutPlan(tuple(nodes), placements_of(nodes), repetitions=repetitions),
    )


def truth_of(
    seat_mm: float, slips: tuple[tuple[str, str, int, int, float], ...] = (), *, shared: bool = False
) -> Truth:
    """Lines that differ by module and sensor, mountings and runs; the stand's errors as described."""
    components = Components(
        module=LineSpread(0.5, 1.0, 0.3),
        sensor=LineSpread(0.8, 1.5, 0.3),
        session=LineSpread(0.10, 0.2, 0.0),
        repetition=LineSpread(0.08, 0.2, 0.0),
        residual=0.06,
    )
    if shared:  # what a run does to all its sensors alike outweighs what it does to each
        components = replace(components, shared_run=LineSpread(0.4, 0.4, 0.0))
    generation = GenerationTruth(
        law=SignalLaw(parasitic=9.0, per_mm=0.8),
        components=components,
        loop=LoopWidth(0.1),
        noise=SampleNoise(0.02, 0.0, 0.0),
        layout=LayoutTruth(seat_mm, slips),
    )
    return Truth((generation,), StandTruth(scale=0.0003, zero_mm=0.03, rest_length_mm=0.05, node_mm=NODE))


def described(nodes: dict[str, tuple[float, float]]) -> str:
    """The description with the geometry of *nodes*."""
    inside = ", ".join(f"{name} = [{x:g}, {y:g}]" for name, (x, y) in nodes.items())
    first, second, *_ = nodes
    return f'{DESCRIPTION}[geometry.panel]\nnodes = {{ {inside} }}\ndatum = ["{first}", "{second}"]\n'


def campaign_read(plan: Plan, truth: Truth, nodes: dict[str, tuple[float, float]], seed: int) -> CampaignRead:
    """Write the campaign and read it back."""
    files = {r.file: recording_bytes(r) for r in simulate_recordings(plan, truth, seed)}
    files["campaign.toml"] = described(nodes).encode()
    files["sensors.csv"] = sensors_text(plan, truth, seed, {}).encode()
    files["modules.csv"] = modules_text(plan, {}).encode()
    with tempfile.TemporaryDirectory() as folder:
        write_campaign(files, Path(folder) / "made")
        return read_campaign(Path(folder) / "made")


def fits_alone(calibration: Calibration) -> SimpleNamespace:
    """The nested fit of the generation without its limits, which cost more than all the rest."""
    used = calibration.readings[calibration.readings["used"]]
    places = choose_places(used["x"].to_numpy(float), 0.4, has_zero=True)
    model = build_model(used, used["signal"].to_numpy(float), "generation 1")
    return SimpleNamespace(by_generation=(fit_generation(model, places, limits_at=()),))


@lru_cache(maxsize=8)
def laid(
    kind: str = "panel",
    modules: int = 4,
    seat_mm: float = 0.0,
    seed: int = 1,
    shared: bool = False,
    slips: tuple[tuple[str, str, int, int, float], ...] = (),
) -> Laid:
    """A campaign of panels (four nodes, six sensors) or braced ones (five nodes, ten sensors)."""
    nodes = PANEL if kind == "panel" else BRACED
    plan = plan_of(nodes, modules, shared=shared)
    read = campaign_read(plan, truth_of(seat_mm, slips, shared=shared), nodes, seed)
    intake = read.intake
    calibration = analyse_calibration(read.readings, intake.description, intake.sensors, intake.file_hashes)
    variance = fits_alone(calibration)
    registers = intake.modules, intake.sensors
    layout = analyse_layout(
        read.of_type(LayoutFeatures),
        calibration,
        variance,  # type: ignore[arg-type]
        None,
        intake.description,
        registers,
    )
    assert layout is not None
    return Laid(read, calibration, variance, layout)
