"""The demonstration's earlier campaign: a small one of a process before the first, in other units."""

from __future__ import annotations

from importlib.resources import files

import numpy as np
import pandas as pd

from campaign.simulation.plan import Batch, Generation, Plan, StaircasePlan, panel_places
from campaign.simulation.readings import simulate_readings
from campaign.simulation.recording_text import SyntheticColumn, SyntheticRecording, recording_bytes
from campaign.simulation.registers import modules_text, sensors_text
from campaign.simulation.truth import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    SignalLaw,
    StandTruth,
    Truth,
)
from campaign.simulation.truth_text import truth_text

EARLIER_FOLDER = "earlier/brush_coated"
EARLIER_SEED = 20240611
EARLIER_NODES = {"A": (0.0, 0.0), "B": (96.0, 0.0), "C": (88.0, 62.0), "D": (10.0, 58.0)}
EARLIER_EDGES = (("A", "B"), ("B", "C"), ("C", "D"), ("A", "C"))
_UNITS = ("The recordings hold one row a step: lengths in cm, signals in nF, and no time.", "")
PF_A_NF, MM_A_CM = 1000.0, 10.0


def earlier_plan() -> Plan:
    """Return the design: four panels, four sensors each, three runs up to 30 %."""
    return Plan(
        generations=(Generation("brush-coated", (Batch("", ("E01", "E02", "E03", "E04")),)),),
        places=panel_places(EARLIER_NODES, EARLIER_EDGES),
        repetitions=3,
        staircase=StaircasePlan(levels=(0.0, 0.05, 0.10, 0.15, 0.20, 0.25, 0.30), descending=True),
    )


def earlier_truth() -> Truth:
    """Return what is true: a film brushed on in coats, thick and uneven."""
    process = GenerationTruth(
        law=SignalLaw(parasitic=9.0, per_mm=0.60),
        components=Components(
            module=LineSpread(1.4, 2.2, 0.5),
            sensor=LineSpread(2.2, 3.4, 0.6),
            repetition=LineSpread(0.25, 0.5, -0.2),
            sensor_by_level=0.25,
            residual=0.20,
        ),
        loop=LoopWidth(1.1, 0.25),
    )
    return Truth((process,), StandTruth(scale=0.0005, zero_mm=0.05, rest_length_mm=0.2, build_mm=0.5))


def earlier_files() -> dict[str, bytes]:
    """Return every file of the earlier campaign by its path from the demonstration's folder."""
    plan, truth = earlier_plan(), earlier_truth()
    details = {
        "materials": "silicone that does not exist, brushed on in coats (invented)",
        "geometry": "panel",
    }
    named = {
        "campaign.toml": _description(),
        "modules.csv": modules_text(plan, {"brush-coated": details}).encode(),
        "sensors.csv": sensors_text(plan, truth, EARLIER_SEED, {}).encode(),
        "TRUTH.md": truth_text(plan, truth, EARLIER_SEED, faults={}, further=_UNITS).encode(),
    }
    readings = simulate_readings(plan, truth, EARLIER_SEED)
    runs = {
        str(path): recording_bytes(_recording(str(path), rows)) for path, rows in readings.groupby("trial")
    }
    return {f"{EARLIER_FOLDER}/{path}": data for path, data in (named | runs).items()}


def _description() -> bytes:
    texts = files("campaign.simulation").joinpath("demo_texts")
    return texts.joinpath("earlier_description.toml").read_bytes()


def _recording(path: str, rows: pd.DataFrame) -> SyntheticRecording:
    """One run as a table with one row a step and no time; lengths in cm, signals in nF."""
    falling = np.where(rows["direction"] == "falling", -1.0, 1.0)
    first = rows.iloc[0]
    return SyntheticRecording(
        path,
        (
            ("Invented data made by campaign.simulation; nothing was measured", ""),
            ("module", str(first["module"])),
            ("sensor", str(first["sensor"])),
        ),
        (
            SyntheticColumn("step", rows["order"].to_numpy(dtype=np.float64), 0),
            SyntheticColumn("way", falling, 0),
            SyntheticColumn("length_cm", rows["length_mm"].to_numpy() / MM_A_CM, 4),
            SyntheticColumn("capacitance_nF", rows["signal"].to_numpy() / PF_A_NF, 6),
        ),
    )
