"""The demonstration: an invented campaign with a few faults in it, and the truth written beside it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from datetime import date, time
from importlib.resources import files

import numpy as np

from campaign.simulation.demo_braced import (
    BRACED_SCHEDULE,
    BRACED_SEED,
    BRACED_SLIP,
    braced_plan,
    braced_truth,
    braced_truth_text,
)
from campaign.simulation.demo_earlier import earlier_files
from campaign.simulation.plan import Batch, Generation, Place, Plan, RunKey, StaircasePlan, panel_places
from campaign.simulation.recording_text import (
    MARKED,
    PLAIN,
    SEMICOLON,
    Dialect,
    SyntheticRecording,
    recording_bytes,
)
from campaign.simulation.recordings import simulate_recordings
from campaign.simulation.registers import (
    csv_text,
    joined_text,
    modules_text,
    sensors_text,
    sessions_text,
)
from campaign.simulation.schedule import Schedule
from campaign.simulation.staircase import step_timing
from campaign.simulation.trial_plans import CyclicPlan, HoldPlan, LayoutPlan, SweepPlan, placed
from campaign.simulation.trial_truths import (
    CyclicTruth,
    HoldTruth,
    InfluenceTruth,
    LayoutTruth,
    LogarithmicRelaxation,
    StretchedRelaxation,
)
from campaign.simulation.truth import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    SampleNoise,
    Settling,
    SignalLaw,
    StandTruth,
    Truth,
)
from campaign.simulation.truth_text import truth_text

SEED = 20250243
"""Of a hundred seeds tried, one with which every sensor calibrates to a line with R² above 0.99."""

NODES = {"A": (0.0, 0.0), "B": (96.0, 0.0), "C": (88.0, 62.0), "D": (10.0, 58.0)}
EDGES = (("A", "B"), ("B", "C"), ("C", "D"), ("D", "A"), ("A", "C"), ("B", "D"))

DEAD = ("M04", "CD")
DEAD_RUN = "trials/M04/M04_CD_cal_r1_s1.csv"
MISLABELLED = "trials/M03/M03_AB_cal_r2_s2.csv"
MISLABELLED_IS = "trials/M03/M03_AC_cal_r2_s2.csv"
DUPLICATED = "trials/M08/M08_CD_cal_r3_s1.csv"
DUPLICATE = "trials/M08/M08_CD_cal_r4_s1.csv"
UNSETTLED = "trials/M02/M02_AC_cal_r2_s1.csv"
UNSETTLED_PLATEAU = 5
UNSETTLED_CREEP_PF = 0.9
KNOCKED = "trials/M09/M09_DA_cal_r3_s2.csv"
SLIP = ("M08", "AC", 1, 3, -6.0)
MOVED_BY_PRESSURE = ("M10", "BC", 0.24)
WARMED = ("M09", "AB")
WARMED_RUN = "trials/M09/M09_AB_hold_r4_s2.csv"

SCHEDULE = Schedule(date(2025, 2, 3))

TEXTS = {
    "campaign.toml": "description.toml",
    "plans/next_panels.toml": "next_panels.toml",
    "notes/the-stand.md": "notes/the-stand.md",
    "notes/the-second-process.md": "notes/the-second-process.md",
    "notes/loops-holds-pressure.md": "notes/loops-holds-pressure.md",
    "notes/shapes-from-lengths.md": "notes/shapes-from-lengths.md",
    "notes/panel.svg": "notes/panel.svg",
}
"""Files of the folder that are written by hand: where they go, and their names beside this module."""


def demo_plan() -> Plan:
    """Return the design: 2 generations of 2 batches of 3 panels, 6 sensors, 2 mountings, 3 runs."""
    dead = frozenset(
        RunKey(*DEAD, session, repetition)
        for session in ("1", "2")
        for repetition in (1, 2, 3)
        if (session, repetition) != ("1", 1)
    )
    return Plan(
        generations=(
            Generation(
                "hand-poured", (Batch("P1", ("M01", "M02", "M03")), Batch("P2", ("M04", "M05", "M06")))
            ),
            Generation(
                "blade-cast", (Batch("B1", ("M07", "M08", "M09")), Batch("B2", ("M10", "M11", "M12")))
            ),
        ),
        places=demo_places(),
        sessions=("1", "2"),
        repetitions=3,
        staircase=StaircasePlan(descending=True),
        omitted=dead,
        cyclic=CyclicPlan(positions=("AB", "AC"), session="2"),
        holds=demo_holds(),
        pressure=SweepPlan(
            positions=tuple(place.position for place in demo_places()), missing=frozenset({DEAD})
        ),
        thermal=SweepPlan(
            positions=("AB", "BC"),
            modules=("M01", "M04", "M07", "M10"),
            strains=(0.0, 0.30),
            low=15.0,
            high=35.0,
            leg_s=1500.0,
            move_s=30.0,
            sample_period_s=15.0,
            start=time(14, 0),
            run_minutes=105,
        ),
        layout=demo_layout(),
    )


def demo_holds() -> tuple[HoldPlan, ...]:
    """Return the holds: two strains and the rest length for an hour each, and once a room that warms up."""
    panels = ("M01", "M02", "M04", "M05", "M07", "M08", "M10", "M11")
    held, diagonal = (tuple((module, place) for module in panels) for place in ("AB", "AC"))
    resting = tuple((module, "AB") for module in ("M01", "M04", "M07", "M10"))
    return (
        HoldPlan(
            held, strain=0.20, repetition=1, ramp_s=2.0, sample_period_s=1.0, session="2", start=time(14, 30)
        ),
        HoldPlan(
            held, strain=0.40, repetition=2, ramp_s=2.0, sample_period_s=1.0, session="2", start=time(15, 45)
        ),
        HoldPlan(diagonal, strain=0.40, repetition=1, ramp_s=2.0, session="2", start=time(18, 15)),
        HoldPlan(resting, repetition=3, sample_period_s=1.0, session="2", start=time(17, 0)),
        HoldPlan((WARMED,), repetition=4, warming_k=5.0, session="2", start=time(17, 0)),
    )


def demo_layout() -> LayoutPlan:
    """Return the placements of the panel in the frame: larger, longer, higher, sheared, uneven, flat."""
    return LayoutPlan(
        tuple(NODES),
        (
            placed(NODES, 1.05, 1.05),
            placed(NODES, 1.30, 1.10),
            placed(NODES, 1.10, 1.33),
            placed(NODES, 1.20, 1.22, shear=0.12),
            placed(NODES, 1.15, 1.15, moved={"C": (12.0, 9.0)}),
            placed(NODES, 1.36, 1.02),
        ),
        missing=frozenset({DEAD}),
    )


def demo_places() -> tuple[Place, ...]:
    """Return the six places of the panel: four edges and two diagonals."""
    return panel_places(NODES, EDGES)


def demo_truth() -> Truth:
    """Return what is true: the blade makes sensors more alike, the clamps stay as they were."""
    noise = SampleNoise(white=0.030, slow=0.010, slow_correlation=0.5)
    settling = Settling(share=0.04, time_s=1.6)
    cycling = CyclicTruth(delay_s=0.06, conditioning_cycles=0.9, recovered=0.2, run_sd=0.02)
    holding = HoldTruth(
        relative_sd=0.12, left_after=0.5, recovery_s=400.0, drift_per_hour=0.05, drift_sd=0.02, flicker=0.003
    )
    inflation = InfluenceTruth(per_strain=0.030, per_strain_sd=0.006, run_sd=0.0010, loop=0.10, loop_sd=0.02)
    warming = InfluenceTruth(
        coefficient=0.030, sensor_sd=0.003, run_sd=0.0005, per_strain=0.020, loop=0.02, origin=22.5
    )
    seated = LayoutTruth(seat_mm=0.20, slips=(SLIP,))
    poured = GenerationTruth(
        law=SignalLaw(parasitic=9.0, per_mm=0.72),
        components=Components(
            batch=LineSpread(0.50, 0.9, 0.5),
            module=LineSpread(0.90, 1.5, 0.5),
            sensor=LineSpread(1.60, 2.6, 0.6),
            session=LineSpread(0.30, 0.5, 0.2),
            repetition=LineSpread(0.18, 0.4, -0.2),
            sensor_by_level=0.22,
            residual=0.15,
        ),
        loop=LoopWidth(0.70, 0.20),
        noise=noise,
        settling=settling,
        cyclic=replace(cycling, first_width_share=0.5, softening_share=0.030),
        hold=replace(holding, relaxation=LogarithmicRelaxation(0.010, 5.0)),
        pressure=replace(inflation, coefficient=0.040, module_sd=0.006, sensor_sd=0.008),
        thermal=warming,
        layout=seated,
    )
    blade = GenerationTruth(
        law=SignalLaw(parasitic=9.0, per_mm=0.90),
        components=Components(
            batch=LineSpread(0.30, 0.6, 0.5),
            module=LineSpread(0.40, 0.8, 0.5),
            sensor=LineSpread(0.80, 1.5, 0.6),
            session=LineSpread(0.32, 0.5, 0.2),
            repetition=LineSpread(0.16, 0.35, -0.2),
            sensor_by_level=0.16,
            residual=0.14,
        ),
        loop=LoopWidth(0.42, 0.12),
        noise=noise,
        settling=settling,
        cyclic=replace(cycling, first_width_share=0.35, softening_share=0.018),
        hold=replace(holding, relaxation=StretchedRelaxation(0.020, 300.0, 0.5)),
        pressure=replace(
            inflation, coefficient=0.048, module_sd=0.003, sensor_sd=0.004, outliers=(MOVED_BY_PRESSURE,)
        ),
        thermal=warming,
        layout=seated,
    )
    stand = StandTruth(
        scale=0.0003,
        zero_mm=0.03,
        rest_length_mm=0.12,
        build_mm=0.35,
        length_noise_mm=0.004,
        node_mm=0.10,
        temperature_c=22.5,
        temperature_sd_c=0.8,
        signal_per_kelvin=0.03,
    )
    return Truth((poured, blade), stand)


def demo_files() -> dict[str, bytes]:
    """Return every file of the demonstration by its path from the campaign folder."""
    plan, truth = demo_plan(), demo_truth()
    braced, second = braced_plan(), braced_truth(truth)
    written = {path: _text(name) for path, name in TEXTS.items()}
    torn = {DEAD: ("failed before testing", _TORN)}
    registers = {
        "modules.csv": joined_text(
            modules_text(plan, _materials("panel")), modules_text(braced, _materials("braced"))
        ),
        "sensors.csv": joined_text(
            sensors_text(plan, truth, SEED, torn), sensors_text(braced, second, BRACED_SEED, {})
        ),
        "sessions.csv": joined_text(
            sessions_text(plan, truth, SEED, SCHEDULE, _STANDS),
            sessions_text(braced, second, BRACED_SEED, BRACED_SCHEDULE, _STANDS),
        ),
        "trials.csv": csv_text(
            ["file", "use", "reason"], [[KNOCKED, "no", "the table was knocked during the run (invented)"]]
        ),
        "TRUTH.md": truth_text(plan, truth, SEED, faults=_FAULTS, further=braced_truth_text(braced, second)),
    }
    files_of_braced = simulate_recordings(braced, second, BRACED_SEED, BRACED_SCHEDULE)
    return (
        written
        | {path: text.encode() for path, text in registers.items()}
        | _recording_files(plan, truth)
        | {recording.file: recording_bytes(recording) for recording in files_of_braced}
        | earlier_files()
    )


_STANDS = {"edge": ("invented bench", "edge clamps, set anew"), "frame": ("invented frame", "four node pins")}
_TORN = "torn when the panel left its plate (invented)"


def _materials(geometry: str) -> dict[str, dict[str, str]]:
    details = {
        "materials": "silicone that does not exist; brushed carbon electrodes (invented)",
        "cure": "24 h at 23 °C (invented)",
        "geometry": geometry,
    }
    return {"hand-poured": details, "blade-cast": details}


_FAULTS = {
    "dead sensor": f"{' '.join(DEAD)}: `{DEAD_RUN}` shows the cable, then the instrument's overflow",
    "mislabelled file": f"`{MISLABELLED}` is a run of sensor AC, as its first lines say",
    "duplicated file": f"`{DUPLICATE}` has the bytes of `{DUPLICATED}`",
    "unsettled plateau": f"plateau {UNSETTLED_PLATEAU + 1} of `{UNSETTLED}` creeps {UNSETTLED_CREEP_PF} pF",
    "left out by request": f"`{KNOCKED}`, in trials.csv",
    "sensor moved by pressure": "{} {}: c = {} pF/kPa".format(*MOVED_BY_PRESSURE),
    "a clip that slipped, to be detected": "{} {}: {} mm in placement {} of run {}".format(
        *SLIP[:2], f"{SLIP[4]:+g}", SLIP[3], SLIP[2]
    ),
    "a clip that slipped, to be located": "{} {}: {} mm in placement {} of run {}".format(
        *BRACED_SLIP[:2], f"{BRACED_SLIP[4]:+g}", BRACED_SLIP[3], BRACED_SLIP[2]
    ),
    "a room that warms up": f"by 5 K half-way through `{WARMED_RUN}`: its change is not all drift",
}


def _text(name: str) -> bytes:
    return files("campaign.simulation").joinpath("demo_texts").joinpath(name).read_bytes()


def _recording_files(plan: Plan, truth: Truth) -> dict[str, bytes]:
    recordings = {r.file: r for r in simulate_recordings(plan, truth, SEED, SCHEDULE)}
    spoiled = {r.file: r for r in _with_faults(recordings.values(), plan, truth)}
    data = {path: recording_bytes(recording, _dialect(path)) for path, recording in spoiled.items()}
    return data | {DUPLICATE: data[DUPLICATED]}


def _dialect(path: str) -> Dialect:
    """Two stand computers were set up differently on two days."""
    if path.startswith("trials/M05/") and path.endswith("_r3_s2.csv"):
        return SEMICOLON
    if path.startswith("trials/M10/") and path.endswith("_r1_s1.csv"):
        return MARKED
    return PLAIN


def _with_faults(
    recordings: Iterable[SyntheticRecording], plan: Plan, truth: Truth
) -> Iterable[SyntheticRecording]:
    by_path = {recording.file: recording for recording in recordings}
    for path, recording in by_path.items():
        if path == DEAD_RUN:
            yield _dead(recording, truth)
        elif path == MISLABELLED:
            yield _cut_short(by_path[MISLABELLED_IS]).renamed(path)
        elif path == UNSETTLED:
            yield _crept(recording, plan)
        else:
            yield recording


def _dead(recording: SyntheticRecording, truth: Truth) -> SyntheticRecording:
    """A torn electrode: the cable's capacitance and its noise, later the instrument's overflow."""
    signal = recording.values("capacitance_pF")
    noise = 0.02 * np.random.default_rng([SEED, 1]).standard_normal(len(signal))
    flat = truth.of(0).law.parasitic + noise
    flat[len(flat) // 3 :] = np.nan
    return recording.with_values("capacitance_pF", flat)


def _cut_short(recording: SyntheticRecording) -> SyntheticRecording:
    """The same sensor run once more and stopped early, so that the bytes differ from its own file."""
    signal = recording.values("capacitance_pF") + 0.05
    return recording.with_values("capacitance_pF", signal).shortened(len(signal) - 24)


def _crept(recording: SyntheticRecording, plan: Plan) -> SyntheticRecording:
    """A clamp that gives way during one plateau: the signal falls although the stage stands still."""
    timing = step_timing(plan.staircase)
    here = (timing.plateau == UNSETTLED_PLATEAU) & (timing.since_step_s >= 0)
    fall = np.where(here, timing.since_step_s / plan.staircase.dwell_s, 0.0)
    signal = recording.values("capacitance_pF") - UNSETTLED_CREEP_PF * fall
    return recording.with_values("capacitance_pF", signal)
