"""Simulated layouts: what files say of the nodes, what is true of them, and what the sensors felt."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from campaign.simulation import (
    Components,
    GenerationTruth,
    LayoutPlan,
    LayoutTruth,
    LineSpread,
    LoopWidth,
    Plan,
    SignalLaw,
    StandTruth,
    Truth,
    panel_places,
    placed,
    regular_plan,
    simulate_recordings,
)
from campaign.simulation.layout import lengths_between_mm, true_places_mm
from campaign.simulation.recording_text import SyntheticRecording

FloatArray = npt.NDArray[np.float64]

NODES = {"A": (0.0, 0.0), "B": (90.0, 0.0), "C": (80.0, 60.0), "D": (0.0, 60.0)}
EDGES = tuple(combinations(NODES, 2))
LAYOUT = LayoutPlan(
    tuple(NODES), (placed(NODES, 1.1, 1.1), placed(NODES, 1.3, 1.05), placed(NODES, 1.1, 1.2, shear=0.1))
)
PLAN = replace(
    regular_plan(modules=2, repetitions=1, levels=3), places=panel_places(NODES, EDGES), layout=LAYOUT
)
LAW = SignalLaw(parasitic=9.0, per_mm=0.8)
SEED = 8
ROUNDED = 1e-4
"""A sensor's own rest length is that of its place to 0.01 mm: 0.005 mm in 60 mm at most."""


def _logs(truth: Truth, plan: Plan = PLAN, seed: int = SEED) -> list[SyntheticRecording]:
    return [file for file in simulate_recordings(plan, truth, seed) if "_layout_" in file.file]


def _stated(recording: SyntheticRecording, layout: LayoutPlan = LAYOUT) -> FloatArray:
    """Places in the file, one a placement: shape (placements, nodes, 2)."""
    columns = [[recording.values(f"{node}_{axis}_mm") for axis in "xy"] for node in layout.nodes]
    return np.moveaxis(np.array(columns), 2, 0)[:: layout.samples]


def _felt(recording: SyntheticRecording, sensor: str, layout: LayoutPlan = LAYOUT) -> FloatArray:
    """Lengths in mm by the generation's law, one a placement."""
    signal = recording.values(f"capacitance_{sensor}_pF").reshape(-1, layout.samples).mean(axis=1)
    return np.asarray((signal - LAW.parasitic) / LAW.per_mm)


def test_without_errors_every_sensor_feels_the_distance_of_the_stated_places() -> None:
    files = _logs(Truth((GenerationTruth(law=LAW, components=Components(residual=0.0)),)))
    assert [file.file for file in files] == [f"trials/{m}/{m}_layout_r1_sF.csv" for m in PLAN.modules]
    for recording in files:
        stated = _stated(recording)
        assert stated == pytest.approx(np.array(LAYOUT.placements), abs=1e-12)
        for start, end in EDGES:
            known = lengths_between_mm(LAYOUT, stated, start, end)
            assert _felt(recording, f"{start}{end}") == pytest.approx(known, rel=ROUNDED)


def test_a_placement_is_a_block_of_rows_with_its_number() -> None:
    recording = _logs(Truth())[0]
    number, time_s = recording.values("placement"), recording.values("time_s")
    assert number.tolist() == [1.0] * 5 + [2.0] * 5 + [3.0] * 5
    assert np.all(np.diff(time_s) > 0)
    assert time_s[5] == 60.0


def test_sensors_feel_where_the_nodes_truly_were() -> None:
    stand = StandTruth(node_mm=0.5)
    truth = Truth((GenerationTruth(law=LAW, components=Components(residual=0.0)),), stand)
    for number, recording in enumerate(_logs(truth)):
        places = true_places_mm(LAYOUT, truth, number, 1, SEED)
        assert _stated(recording) == pytest.approx(np.array(LAYOUT.placements), abs=1e-12)
        for start, end in EDGES:
            true = lengths_between_mm(LAYOUT, places, start, end)
            assert _felt(recording, f"{start}{end}") == pytest.approx(true, rel=ROUNDED)


def test_places_of_nodes_scatter_as_stated_and_each_for_itself() -> None:
    """4,000 placements: an SD is known to 1.1 %, a correlation to 0.016; four times that is allowed."""
    layout = replace(LAYOUT, placements=LAYOUT.placements[:1] * 4000)
    truth = Truth(stand=StandTruth(node_mm=0.1))
    errors = true_places_mm(layout, truth, 0, 1, SEED) - np.array(layout.placements)
    columns = errors.reshape(4000, -1)
    assert columns.std(axis=0) == pytest.approx(0.1, rel=0.05)
    between = np.corrcoef(columns.T) - np.eye(columns.shape[1])
    assert np.abs(between).max() < 0.065


def test_runs_and_modules_have_places_of_their_own_and_every_second_run_is_in_reverse() -> None:
    layout = replace(LAYOUT, repetitions=2)
    truth = Truth(stand=StandTruth(node_mm=0.1))
    files = _logs(truth, replace(PLAN, layout=layout))
    assert files[1].values("placement")[::5].tolist() == [3.0, 2.0, 1.0]
    assert _stated(files[1]) == pytest.approx(np.array(layout.placements)[::-1], abs=1e-12)
    first, second = (true_places_mm(layout, truth, 0, run, SEED) for run in (1, 2))
    other = true_places_mm(layout, truth, 1, 1, SEED)
    assert np.abs(first - second[::-1]).min() > 0.0
    assert np.abs(first - other).min() > 0.0


def test_a_slip_is_in_one_length_of_one_placement_and_nowhere_else() -> None:
    own = LayoutTruth(seat_mm=0.2)
    slipped = replace(own, slips=(("M02", "AC", 1, 2, -6.0),))
    plain, wrong = (_logs(Truth((GenerationTruth(law=LAW, layout=layout),))) for layout in (own, slipped))
    for before, after in zip(plain, wrong, strict=True):
        for start, end in EDGES:
            change = _felt(after, f"{start}{end}") - _felt(before, f"{start}{end}")
            hit = before.file.startswith("trials/M02") and (start, end) == ("A", "C")
            assert change == pytest.approx([0.0, -6.0 if hit else 0.0, 0.0], abs=6.0 * ROUNDED)


def test_the_seat_scatters_lengths_as_stated() -> None:
    """6 sensors, 400 placements: an SD is known to 1.4 %."""
    layout = replace(LAYOUT, placements=LAYOUT.placements[:1] * 400)
    truth = Truth(
        (GenerationTruth(law=LAW, components=Components(residual=0.0), layout=LayoutTruth(seat_mm=0.3)),)
    )
    recording = _logs(truth, replace(PLAN, layout=layout))[0]
    stated = _stated(recording, layout)
    errors = [
        _felt(recording, f"{start}{end}", layout) - lengths_between_mm(layout, stated, start, end)
        for start, end in EDGES
    ]
    assert np.std(errors) == pytest.approx(0.3, rel=0.06)


def test_a_sensor_reads_low_on_the_way_up_and_high_on_the_way_down() -> None:
    """Half of the loop at its place of the range: 4u(1 − u)/2 · 1 pF, by what came before."""
    truth = Truth((GenerationTruth(law=LAW, components=Components(residual=0.0), loop=LoopWidth(1.0, 0.0)),))
    recording = _logs(truth)[0]
    known = lengths_between_mm(LAYOUT, _stated(recording), "B", "C")
    rest = PLAN.places[EDGES.index(("B", "C"))].rest_length_mm
    share = (known / rest - 1.0) / 0.40
    assert known[1] < known[0] < known[2]
    expected = np.array([-0.5, 0.5, -0.5]) * 4.0 * share * (1.0 - share)
    assert (_felt(recording, "BC") - known) * LAW.per_mm == pytest.approx(expected, abs=4e-3)
    assert np.abs(expected).min() > 0.1


def test_the_frame_is_a_mounting_of_its_own_and_sensors_are_those_of_the_staircases() -> None:
    parts = Components(sensor=LineSpread(2.0), session=LineSpread(0.3), residual=0.0)
    plan = replace(PLAN, generations=regular_plan(modules=40, repetitions=1, levels=3).generations)
    files = simulate_recordings(plan, Truth((GenerationTruth(law=LAW, components=parts),)), SEED)
    by_path = {file.file: file for file in files}
    differences, offsets = [], []
    for module in plan.modules:
        framed = by_path[f"trials/{module}/{module}_layout_r1_sF.csv"]
        stairs = by_path[f"trials/{module}/{module}_AB_cal_r1.csv"]
        line = stairs.values("capacitance_pF") - LAW.parasitic - LAW.per_mm * stairs.values("stage_mm")
        known = lengths_between_mm(LAYOUT, _stated(framed), "A", "B")
        offset = float(np.mean((_felt(framed, "AB") - known) * LAW.per_mm))
        offsets.append(offset)
        differences.append(offset - float(line.mean()))
    # two mountings differ by √2 · 0.3 pF; sensors by 2 pF; each SD of 40 is known to 11 %
    assert np.std(differences) == pytest.approx(0.3 * np.sqrt(2.0), rel=0.4)
    assert np.std(offsets) == pytest.approx(2.0, rel=0.4)


def test_what_is_not_connected_is_not_in_the_file() -> None:
    layout = replace(LAYOUT, missing=frozenset({("M01", "BD")}), modules=("M01",))
    files = _logs(Truth(), replace(PLAN, layout=layout))
    headers = [column.header for column in files[0].columns]
    assert len(files) == 1
    assert "capacitance_BD_pF" not in headers
    assert "capacitance_AC_pF" in headers


@pytest.mark.parametrize(
    "wrong",
    [{"placements": ()}, {"nodes": ("A", "B")}, {"samples": 0}, {"repetitions": 0}, {"placement_s": 0.0}],
)
def test_a_layout_that_cannot_be_run_is_refused(wrong: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match="layout needs"):
        replace(LAYOUT, **wrong)
