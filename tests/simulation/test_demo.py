"""The demonstration: what the command makes is what lies in the repository, and says that it is invented."""

from __future__ import annotations

import hashlib
import subprocess
import sys
import tomllib
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

from campaign.pages.notes import make_notes, read_note_files
from campaign.simulation import demo, simulate_recordings
from campaign.simulation.__main__ import main
from campaign.simulation.demo import demo_files, demo_plan, demo_truth
from campaign.simulation.demo_braced import BRACED_NODES, BRACED_SCHEDULE, braced_plan
from campaign.simulation.recording_text import recording_bytes

FOLDER = Path(__file__).parents[2] / "demo_campaign"


@pytest.fixture(scope="module")
def made() -> dict[str, bytes]:
    return demo_files()


def _digest(files: dict[str, bytes]) -> dict[str, str]:
    return {path: hashlib.sha256(data).hexdigest() for path, data in files.items()}


def test_the_folder_in_the_repository_is_what_the_command_makes(made: dict[str, bytes]) -> None:
    there = {p.relative_to(FOLDER).as_posix(): p.read_bytes() for p in FOLDER.rglob("*") if p.is_file()}
    assert _digest(there) == _digest(made)


def test_another_process_with_another_hash_seed_makes_the_same_bytes(
    made: dict[str, bytes], tmp_path: Path
) -> None:
    into = tmp_path / "demo"
    command = [sys.executable, "-m", "campaign.simulation", "--into", str(into)]
    done = subprocess.run(
        command, cwd=FOLDER.parent, env={"PYTHONHASHSEED": "7"}, capture_output=True, text=True, check=True
    )
    assert f"{len(made)} files" in done.stdout
    assert _digest(
        {p.relative_to(into).as_posix(): p.read_bytes() for p in into.rglob("*") if p.is_file()}
    ) == (_digest(made))


def test_the_command_leaves_a_folder_with_other_files_alone(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "thesis.txt").write_text("mine")
    assert main(["--into", str(tmp_path)]) == 2
    assert "thesis.txt" in capsys.readouterr().err
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.txt"]


def test_it_is_small_enough(made: dict[str, bytes]) -> None:
    assert sum(map(len, made.values())) < 12e6


def test_every_file_says_that_it_is_invented(made: dict[str, bytes]) -> None:
    assert [path for path, data in made.items() if b"invented" not in data.lower()] == []
    description = tomllib.loads(made["campaign.toml"].decode())["campaign"]
    assert "invented" in description["title"]
    assert "Invented" in description["description"]
    assert description["authors"][0]["name"] == "Invented Author"
    for page in (
        "notes/the-stand.md",
        "notes/the-second-process.md",
        "notes/loops-holds-pressure.md",
        "notes/shapes-from-lengths.md",
    ):
        assert "(invented)" in made[page].decode().splitlines()[0]


def test_the_description_says_of_the_plan_what_the_plan_says(made: dict[str, bytes]) -> None:
    description = tomllib.loads(made["campaign.toml"].decode())
    nodes = {name: tuple(map(float, at)) for name, at in description["geometry"]["panel"]["nodes"].items()}
    assert nodes == demo.NODES
    assert description["range"]["strain"] == max(demo_plan().staircase.levels)
    assert description["campaign"]["first_day"] == demo.SCHEDULE.first_day
    assert description["campaign"]["last_day"] == BRACED_SCHEDULE.last_day(braced_plan())
    assert BRACED_SCHEDULE.first_day > demo.SCHEDULE.last_day(demo_plan())
    braced = description["geometry"]["braced"]["nodes"]
    assert {name: tuple(map(float, at)) for name, at in braced.items()} == BRACED_NODES
    stand = demo_truth().stand
    assert float(description["reference"]["length"]["scale"]) == stand.scale
    assert description["reference"]["length"]["zero"] == f"{stand.zero_mm:g} mm"
    assert description["reference"]["node"] == f"{stand.node_mm:.1f} mm"


def test_the_faults_are_there(made: dict[str, bytes]) -> None:
    assert made[demo.DUPLICATE] == made[demo.DUPLICATED]
    assert b"# sensor: AC" in made[demo.MISLABELLED]
    assert made[demo.MISLABELLED] != made[demo.MISLABELLED_IS]
    assert made[demo.DEAD_RUN].count(b"OVER") > 100
    sensors = pd.read_csv(FOLDER / "sensors.csv")
    assert sensors.dropna(subset="fate")[["module", "sensor"]].to_numpy().tolist() == [list(demo.DEAD)]
    assert [path for path in made if path.startswith("trials/M04/M04_CD")] == [demo.DEAD_RUN]
    assert demo.KNOCKED in made["trials.csv"].decode()
    truth = made["TRUTH.md"].decode()
    for path in (demo.DEAD_RUN, demo.MISLABELLED, demo.DUPLICATE, demo.UNSETTLED, demo.KNOCKED):
        assert path in truth
        assert path in made


def test_other_kinds_leave_the_staircases_as_they_are(made: dict[str, bytes]) -> None:
    alone = replace(demo_plan(), cyclic=None, holds=(), pressure=None, thermal=None, layout=None)
    without = {file.file: file for file in simulate_recordings(alone, demo_truth(), demo.SEED, demo.SCHEDULE)}
    whole = simulate_recordings(demo_plan(), demo_truth(), demo.SEED, demo.SCHEDULE)
    stairs = {file.file: file for file in whole if "_cal_" in file.file}
    assert stairs.keys() == without.keys()
    assert all(recording_bytes(stairs[path]) == recording_bytes(file) for path, file in without.items())
    panels = [path for path in made if path.startswith("trials/") and path.split("/")[1] <= "M12"]
    assert sum("_cal_" not in path for path in panels) == len(whole) - len(stairs)


def test_every_kind_is_there_in_both_generations(made: dict[str, bytes]) -> None:
    words = {
        "loop": "cyclic",
        "hold": "hold",
        "inflate": "pressure",
        "warm": "thermal",
        "layout": "layout",
    }
    named = tomllib.loads(made["campaign.toml"].decode())["recordings"]["kinds"]
    assert {word: named.get(word, word) for word in words} == words
    for word in words:
        modules = {path.split("/")[1] for path in made if f"_{word}_" in path}
        for generation in demo_plan().generations:
            assert len(modules & set(generation.modules)) >= 2


def test_the_truth_of_every_kind_is_written_down(made: dict[str, bytes]) -> None:
    """Hand-poured, AB at 0.1 1/s: 0.7 pF of loop, and 2 · 69.12 pF · 0.1 1/s · 0.06 s = 0.829 pF of delay."""
    truth = made["TRUTH.md"].decode()
    assert "| AB | 0.1 | 0.700 | 0.829 | 1.529 | 5.53 |" in truth
    assert "1.11 % of the step at 1 min, 2.08 % at 10 min, 2.86 % at 1 h" in truth
    assert "c = 0.04 pF/kPa; SD between modules 0.006, between sensors 0.008" in truth
    assert demo.WARMED_RUN in truth
    assert demo.WARMED_RUN in made
    assert "M10 BC: c = 0.24 pF/kPa" in truth


def test_the_room_warms_up_in_one_hold_only(made: dict[str, bytes]) -> None:
    for path in (path for path in made if "_hold_" in path):
        lines = [line for line in made[path].decode("utf-8-sig").splitlines() if line[0].isdigit()]
        ambient = [float(line.split(",")[3]) for line in lines]
        assert (max(ambient) - min(ambient) > 4.0) == (path == demo.WARMED_RUN)


def test_the_unsettled_plateau_falls_while_the_stage_stands(made: dict[str, bytes]) -> None:
    lines = made[demo.UNSETTLED].decode().splitlines()
    start = next(number for number, line in enumerate(lines) if line.startswith("time_s"))
    table = pd.DataFrame(
        [[float(field) for field in line.split(",")] for line in lines[start + 1 :]],
        columns=lines[start].split(","),
    )
    begin = demo.UNSETTLED_PLATEAU * 14.0
    held = table[(table["time_s"] > begin + 1) & (table["time_s"] < begin + 12)]
    assert held["stage_mm"].max() - held["stage_mm"].min() < 0.04
    assert held["capacitance_pF"].iloc[0] - held["capacitance_pF"].iloc[-1] > 0.5


def test_rest_signals_follow_the_lengths_of_the_places(made: dict[str, bytes]) -> None:
    lengths = {place.position: place.rest_length_mm for place in demo_plan().places}
    first = {
        sensor: float(made[f"trials/M07/M07_{sensor}_cal_r1_s1.csv"].decode().splitlines()[5].split(",")[2])
        for sensor in lengths
    }
    assert sorted(lengths, key=lengths.__getitem__) == sorted(first, key=first.__getitem__)
    assert all(40.0 < value < 115.0 for value in first.values())


def test_truth_page_gives_the_strain_equivalents_of_the_components(made: dict[str, bytes]) -> None:
    """Hand-poured sensors: 1.6 pF over a mean slope of 60.82 pF is 2.63 % at zero strain."""
    row = next(line for line in made["TRUTH.md"].decode().splitlines() if line.startswith("| sensor | 1.6 "))
    assert [cell.strip() for cell in row.split("|")[5:8]] == ["2.63", "3.22", "3.90"]


def test_the_notes_are_shown_whole_with_their_picture() -> None:
    notes = make_notes(read_note_files(FOLDER))
    assert [page.title for page in notes.pages] == [
        "Loops, holds, inflation and warmth (invented)",
        "Shapes from lengths (invented)",
        "The second process (invented)",
        "The stand (invented)",
    ]
    assert notes.notices == ()
    assert len(notes.files or {}) == 1
