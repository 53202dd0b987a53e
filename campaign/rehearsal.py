"""Rehearsals: the synthetic campaign of a planned design.

A plan is tried so before the stand is booked. The same generator makes it that makes the demonstration. The
folder's description is the plan's own file with what is needed to read the recordings; it says that this is a
rehearsal, and so does every page about it.
"""

from __future__ import annotations

import hashlib
import re
import tomllib
from dataclasses import asdict, fields
from datetime import date
from pathlib import Path

from campaign.notices import CampaignStops, Notice
from campaign.recordings.description import DESCRIPTION_FILE, Description
from campaign.recordings.description_file import read_plan_file
from campaign.recordings.planned_design import LINE_LEVELS, PlannedDesign, PlannedGeneration
from campaign.simulation.folder import FolderHoldsOther, write_campaign
from campaign.simulation.plan import Place, Plan
from campaign.simulation.planned import AssumedProcess, assumed_plan, assumed_truth
from campaign.simulation.recording_text import recording_bytes
from campaign.simulation.recordings import simulate_recordings
from campaign.simulation.registers import modules_text, sensors_text, sessions_text
from campaign.simulation.schedule import Schedule
from campaign.simulation.truth import StandTruth, Truth
from campaign.simulation.truth_text import truth_text

BANNER = "# REHEARSAL, NOT MEASURED. Made by `campaign rehearse`; every recording is invented."
"""First line of a rehearsal's description."""

ADDED = "# ---- Added by `campaign rehearse`: how the invented recordings are named and headed."

_READING = """
[recordings]
files = "trials/**/*.csv"
name  = [
  "{module}_{sensor}_{kind}_r{repetition}_s{session}",
  "{module}_{kind}_r{repetition}_s{session}",
]

[recordings.kinds]
cal     = "staircase"
loop    = "cyclic"
inflate = "pressure"
"""

_COLUMNS = (
    ("stage_mm", "length", "mm"),
    ("capacitance_pF", "signal", "pF"),
    ("stage_{sensor}_mm", "length", "mm"),
    ("capacitance_{sensor}_pF", "signal", "pF"),
    ("{node}_x_mm", "node_x", "mm"),
    ("{node}_y_mm", "node_y", "mm"),
    ("pressure_kPa", "pressure", "kPa"),
    ("ambient_C", "temperature", "°C"),
)
_COLUMNS_BY_KIND = {"node_x": "layout", "node_y": "layout", "pressure": "pressure"}
_WIDE = ("pressure", "layout")

FIRST_DAY = date(2030, 1, 7)
"""First day of the invented diary."""


def rehearse(plan_file: Path, into: Path) -> int:
    """Write the synthetic campaign of *plan_file* into *into*, whole or not at all.

    Returns
    -------
    int
        Exit status 0.

    Raises
    ------
    CampaignStops
        Where the plan cannot be read or rehearsed (all faults at once), or the folder holds other things.
    """
    files = rehearsal_files(_read(plan_file), plan_file.name)
    try:
        write_campaign(files, into)
    except FolderHoldsOther as refusal:
        remedy = "name another folder with --into"
        notice = Notice(
            "output-folder", "stops", None, None, None, str(refusal), "nothing is written", remedy
        )
        raise CampaignStops([notice]) from refusal
    size = sum(map(len, files.values())) / 1e6
    print(f"{len(files)} files, {size:.1f} MB, written to {into}: a rehearsal, nothing in it was measured.")
    print(f"What it could resolve: campaign report {into}")
    return 0


def _read(plan_file: Path) -> bytes:
    try:
        return plan_file.read_bytes()
    except OSError as fault:
        what = f"'{plan_file}' cannot be opened ({fault.strerror})"
        notice = Notice(
            "no-description", "stops", None, None, None, what, "nothing is written", "name the plan's file"
        )
        raise CampaignStops([notice]) from fault


def rehearsal_files(data: bytes, name: str = "PLAN.toml") -> dict[str, bytes]:
    """Return every file of a rehearsal by its path from the folder.

    Parameters
    ----------
    data
        The plan as it stands in its file; the seed of all random numbers comes from it, so that the same plan
        makes the same bytes.
    name
        Of the file, for faults.

    Raises
    ------
    CampaignStops
        With all faults of the plan.
    """
    description = read_plan_file(data, name)
    design = description.planned
    assert design is not None
    seed = int.from_bytes(hashlib.sha256(data).digest()[:6], "big")
    geometry = description.geometries.get(design.geometry)
    plan = assumed_plan(
        generations=[generation.name for generation in design.generations],
        modules=design.modules,
        batches=design.batches,
        places=tuple(Place(**asdict(place)) for place in design.places),
        sessions=design.sessions,
        repetitions=design.repetitions,
        levels=design.levels,
        descending=design.descending,
        kinds=design.kinds,
        nodes=geometry.nodes if geometry is not None else {},
    )
    truth = assumed_campaign_truth(description, design)
    schedule = Schedule(FIRST_DAY)
    details = {"materials": "none: rehearsed (invented)"} | (
        {"geometry": design.geometry} if design.geometry else {}
    )
    named = {
        DESCRIPTION_FILE: rehearsal_description(data, design, name),
        "modules.csv": modules_text(plan, {generation.name: details for generation in plan.generations}),
        "sensors.csv": sensors_text(plan, truth, seed, {}),
        "sessions.csv": sessions_text(plan, truth, seed, schedule, _STANDS),
        "TRUTH.md": truth_text(plan, truth, seed, faults={}, further=_truth_lines(name)),
    }
    files = {path: text.encode() for path, text in named.items()}
    return files | _recordings(plan, truth, seed, schedule)


_STANDS = {
    "edge": ("rehearsed stand (invented)", "edge clamps"),
    "frame": ("rehearsed frame (invented)", "node pins"),
}


def _recordings(plan: Plan, truth: Truth, seed: int, schedule: Schedule) -> dict[str, bytes]:
    made = simulate_recordings(plan, truth, seed, schedule)
    return {recording.file: recording_bytes(recording) for recording in made}


def _truth_lines(name: str) -> list[str]:
    return [
        "## A rehearsal, not measured",
        "",
        f"Made from the plan in {name}, which stands in {DESCRIPTION_FILE}; the seed comes from its bytes.",
        "",
    ]


def assumed_campaign_truth(description: Description, design: PlannedDesign) -> Truth:
    """Return what is true in a rehearsal: the plan's spread, and ``[reference]`` for the stand's errors."""
    rest_mm = design.mean_rest_length_mm
    length = description.length_reference
    stand = StandTruth(
        scale=_known(length.scale_relative),
        zero_mm=_known(length.zero_mm),
        length_noise_mm=_known(length.random_mm),
        node_mm=_known(description.node_reference_mm),
    )
    return Truth(tuple(assumed_truth(_assumed(g), rest_mm) for g in design.generations), stand)


def _known(value: float) -> float:
    return value if value == value else 0.0


def _assumed(generation: PlannedGeneration) -> AssumedProcess:
    lines = {level: getattr(generation, level) for level in LINE_LEVELS}
    alike = {f.name for f in fields(AssumedProcess)} - {"signal", "lines"}
    return AssumedProcess(
        signal=generation.signal_pf,
        lines={level: (line.zero, line.slope, line.correlation) for level, line in lines.items()},
        **{name: getattr(generation, name) for name in alike},
    )


# ---------------------------------------------------------------- description


def rehearsal_description(data: bytes, design: PlannedDesign, name: str) -> str:
    """Return the rehearsal's ``campaign.toml``: the plan, marked, and how to read the recordings.

    Raises
    ------
    CampaignStops
        Where ``[campaign]`` is not written as a table of its own, so that it cannot be marked.
    """
    text = data.decode("utf-8-sig").replace("\r\n", "\n")
    stated = "campaign" in tomllib.loads(text)
    marked, changed = _CAMPAIGN.subn(rf"\g<0>\n{_MARK}", text, count=1)
    if not stated:
        marked, changed = f'{text}\n[campaign]\ntitle = "Rehearsal of {Path(name).stem}"\n{_MARK}\n', 1
    if changed == 0:
        what = "[campaign] is not a table of its own"
        notice = Notice(
            "wrong-value", "stops", name, None, None, what, "nothing is written", "write its head [campaign]"
        )
        raise CampaignStops([notice])
    wide = any(kind in _WIDE for kind in design.kinds)
    columns = [
        f'\n[[columns]]\nheader   = "{header}"\nquantity = "{quantity}"\nunit     = "{unit}"\n'
        for header, quantity, unit in _COLUMNS
        if _COLUMNS_BY_KIND.get(quantity, "staircase") in design.kinds and (wide or "{" not in header)
    ]
    return "\n".join([BANNER, "", marked, ADDED]) + _READING + "".join(columns)


_MARK = "rehearsal = true      # every page then says: rehearsal, not measured"
_CAMPAIGN = re.compile(r"^[ \t]*\[[ \t]*campaign[ \t]*\][^\n]*$", re.MULTILINE)
