"""The demonstration's layouts, braced panels and earlier campaign: read back, and laid beside their truth."""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from campaign.pipeline import CampaignRead, read_campaign
from campaign.simulation import (
    LayoutTruth,
    Plan,
    Truth,
    simulate_readings,
    simulate_recordings,
    write_campaign,
)
from campaign.simulation.demo import NODES, SCHEDULE, SEED, SLIP, demo_files, demo_plan, demo_truth
from campaign.simulation.demo_braced import (
    BRACED_NODES,
    BRACED_SCHEDULE,
    BRACED_SEED,
    BRACED_SLIP,
    braced_plan,
    braced_truth,
)
from campaign.simulation.demo_earlier import EARLIER_FOLDER, EARLIER_SEED, earlier_plan, earlier_truth
from campaign.simulation.recording_text import SyntheticRecording
from campaign.trials.layout import LayoutFeatures

FOLDER = Path(__file__).parents[2] / "demo_campaign"


@pytest.fixture(scope="module")
def layouts(tmp_path_factory: pytest.TempPathFactory) -> CampaignRead:
    """The demonstration as read, of its trials the layouts only."""
    files = {
        path: data
        for path, data in demo_files().items()
        if "/" not in path or (path.startswith("trials/") and "_layout_" in path)
    }
    kept = files["trials.csv"].decode().splitlines()[0]
    folder = tmp_path_factory.mktemp("layouts") / "demo"
    write_campaign(files | {"trials.csv": f"{kept}\n".encode()}, folder)
    return read_campaign(folder)


def test_every_panel_was_laid_out_and_every_working_sensor_is_read(layouts: CampaignRead) -> None:
    found = layouts.of_type(LayoutFeatures)
    assert layouts.intake.counts.set_aside == 0
    assert len(found) == 12 * 6 - 1 + 2 * 10
    assert {f.identity.module for f in found.values()} == {*demo_plan().modules, *braced_plan().modules}
    assert ("M04", "CD") not in {(f.identity.module, f.identity.sensor) for f in found.values()}


def test_known_lengths_are_the_distances_of_the_stated_places(layouts: CampaignRead) -> None:
    plans = {module: plan for plan in (demo_plan(), braced_plan()) for module in plan.modules}
    for features in layouts.of_type(LayoutFeatures).values():
        plan = plans[features.identity.module]
        layout = plan.layout
        assert layout is not None
        place = next(p for p in plan.places if p.position == features.identity.sensor)
        stated = np.array(layout.placements)
        ends = (stated[:, layout.nodes.index(node)] for node in (place.start, place.end))
        known = np.linalg.norm(np.subtract(*ends), axis=1)
        assert features.known_length_mm == pytest.approx(known, abs=1e-9)
        strain = known / place.rest_length_mm - 1.0
        assert strain.min() > 0.0
        assert strain.max() < max(plan.staircase.levels)


@pytest.mark.parametrize(
    ("nodes", "plan", "redundancy"), [(NODES, demo_plan(), 1), (BRACED_NODES, braced_plan(), 3)]
)
def test_panels_have_the_redundancy_that_the_note_says(
    nodes: dict[str, tuple[float, float]], plan: Plan, redundancy: int
) -> None:
    """A plane figure of n nodes has 2n − 3 degrees of freedom."""
    assert len(plan.places) - (2 * len(nodes) - 3) == redundancy


def _layout_logs(plan: Plan, truth: Truth, seed: int) -> dict[str, SyntheticRecording]:
    schedule = BRACED_SCHEDULE if seed == BRACED_SEED else SCHEDULE
    made = simulate_recordings(replace(plan, cyclic=None, holds=()), truth, seed, schedule)
    return {recording.file: recording for recording in made if "_layout_" in recording.file}


@pytest.mark.parametrize(
    ("plan", "truth", "seed", "slip"),
    [
        (demo_plan(), demo_truth(), SEED, SLIP),
        (braced_plan(), braced_truth(demo_truth()), BRACED_SEED, BRACED_SLIP),
    ],
)
def test_one_clip_slipped_and_the_truth_says_which(
    plan: Plan, truth: Truth, seed: int, slip: tuple[str, str, int, int, float]
) -> None:
    module, sensor, run, placement, millimetres = slip
    sound = tuple(replace(g, layout=LayoutTruth(seat_mm=g.layout.seat_mm)) for g in truth.generations)
    wrong, right = (_layout_logs(plan, t, seed) for t in (truth, replace(truth, generations=sound)))
    differing = {
        (path, column.header)
        for path, recording in wrong.items()
        for column in recording.columns
        if not np.array_equal(column.values, right[path].values(column.header))
    }
    path = f"trials/{module}/{module}_layout_r{run}_sF.csv"
    header = f"capacitance_{sensor}_pF"
    assert differing == {(path, header)}
    change = wrong[path].values(header) - right[path].values(header)
    here = wrong[path].values("placement") == placement
    assert np.all(change[~here] == 0.0)
    # 0.90 pF/mm, and the sensor's own slope and loop: within a tenth
    assert change[here] == pytest.approx(0.90 * millimetres, rel=0.12)
    said = (FOLDER / "TRUTH.md").read_text(encoding="utf-8")
    assert f"{module} {sensor}: {millimetres:+g} mm in placement {placement} of run {run}" in said


def test_the_truth_of_layouts_is_written_down() -> None:
    """Nodes Q and S stand √(37² + 89²) = 96.38 mm apart."""
    said = (FOLDER / "TRUTH.md").read_text(encoding="utf-8")
    assert "| place of a node, along x and y, about that stated | 0.1 mm | placement |" in said
    assert said.count("drawn once a sensor and placement: 0.2 mm") == 3
    assert "## Braced panels M13 and M14 (blade-cast, batch B3)" in said
    assert "| QS | 96.38 |" in said


def test_the_earlier_campaign_is_read_in_our_units() -> None:
    read = read_campaign(FOLDER / EARLIER_FOLDER)
    assert read.intake.counts.trials_used == 48
    assert {n.code for n in read.intake.notices} == {"converted"}
    found = read.readings.table
    made = simulate_readings(earlier_plan(), earlier_truth(), EARLIER_SEED)
    keys = ["module", "sensor", "repetition", "order"]
    assert found[keys].astype(str).to_numpy().tolist() == made[keys].astype(str).to_numpy().tolist()
    assert set(found["unit"]) == {"pF"}
    # written to 0.000001 nF and 0.0001 cm
    assert found["signal"].to_numpy() == pytest.approx(made["signal"].to_numpy(), abs=0.00051)
    assert found["length_mm"].to_numpy() == pytest.approx(made["length_mm"].to_numpy(), abs=0.00051)
    assert found["direction"].value_counts().to_dict() == {"rising": 288, "falling": 288, "turning": 48}


def test_the_demonstration_names_it_and_its_figures_have_another_range() -> None:
    description = tomllib.loads((FOLDER / "campaign.toml").read_text(encoding="utf-8"))
    assert [one["folder"] for one in description["earlier"]] == [EARLIER_FOLDER]
    earlier = tomllib.loads((FOLDER / EARLIER_FOLDER / "campaign.toml").read_text(encoding="utf-8"))
    assert earlier["campaign"]["simulated"] is True
    assert earlier["range"]["strain"] == max(earlier_plan().staircase.levels)
    assert earlier["range"]["strain"] < description["range"]["strain"]


def test_braced_sensors_are_as_long_as_the_panels_on_average() -> None:
    """Mean signals and slopes of the second process would else differ for their lengths alone."""
    panel, braced = (
        np.mean([p.rest_length_mm for p in plan.places]) for plan in (demo_plan(), braced_plan())
    )
    assert braced == pytest.approx(panel, abs=0.3)
