"""Shared and incremental reading: whoever reads and whatever is known, intake and results are the same."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future
from dataclasses import fields, replace
from pathlib import Path

import pandas as pd
import pytest

from campaign.keeping.store import Store
from campaign.keeping.value_codec import decode, encode
from campaign.recordings import reading_step, shared_reading
from campaign.recordings.description import Author, Description
from campaign.recordings.description_file import load_description
from campaign.recordings.identity import naming_rules
from campaign.recordings.intake import Intake, run_intake
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings
from campaign.recordings.reading_step import ReadingTask, StepResult
from campaign.recordings.recording import Trial
from campaign.recordings.register import read_registers
from campaign.recordings.steering import NOT_STEERING, campaign_steering, steering_rules
from campaign.trials.endurance import features_of_endurance
from campaign.workers.crew import LocalProcesses, ThisProcess
from campaign.workers.workshop import Workshop, open_workshop
from tests.recordings.conftest import CampaignMaker, staircase_text
from tests.recordings.reductions import die_of_m03, fail_on_m03, largest, smallest
from tests.trials.test_cyclic import endurance

Results = dict[tuple[str, str, int], tuple[float, float]]
Reduction = Callable[[Trial], tuple[float, float]]
MODULES = ("M01", "M02", "M03", "M04")
REGISTERS = {
    "modules.csv": "module,generation\n" + "".join(f"{m},first\n" for m in MODULES),
    "sensors.csv": "module,sensor,rest_length,fate\n" + "".join(f"{m},AB,60,\n" for m in MODULES),
    "trials.csv": "file,session\ntrials/M01_AB_staircase_r1.csv,S1\n",
}


def name(module: str, run: int) -> str:
    return f"trials/{module}_AB_staircase_r{run}.csv"


def of_module(*modules: str) -> list[str]:
    return [name(module, run) for module in modules for run in (1, 2, 3)]


RECORDINGS = {file: staircase_text(place / 8) for place, file in enumerate(of_module(*MODULES))}


@pytest.fixture
def folder(make_campaign: CampaignMaker) -> Path:
    return make_campaign(RECORDINGS | REGISTERS)


@pytest.fixture
def parsed(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Return a list of the recordings that this process parses from now on."""
    files: list[str] = []

    def spy(items: Sequence[RecordingBytes], description: Description) -> list[ReadOutcome]:
        files.extend(item.file for item in items)
        return read_recordings(items, description)

    monkeypatch.setattr(reading_step, "read_recordings", spy)
    return files


@pytest.fixture
def processes(monkeypatch: pytest.MonkeyPatch) -> Iterator[Workshop]:
    monkeypatch.setattr(shared_reading, "SMALLEST_BATCH_BYTES", 1)
    with LocalProcesses(2) as crew:
        yield Workshop(crew)


def said(intake: Intake) -> tuple[object, ...]:
    """All that an intake says, in a form that can be compared."""
    tables = (intake.recordings, intake.trials, intake.modules, intake.sensors, intake.sessions)
    texts = tuple(table.to_csv() for table in tables)
    return (*texts, intake.notices, intake.used, intake.put_back, tuple(intake.identities))


def same(left: tuple[Intake, Results], right: tuple[Intake, Results]) -> bool:
    return said(left[0]) == said(right[0]) and list(left[1].items()) == list(right[1].items())


# ---------------------------------------------------------------- processes


def test_processes_read_what_one_process_reads(folder: Path, processes: Workshop) -> None:
    assert same(run_intake(folder, largest, workshop=processes), run_intake(folder, largest))


def test_a_recording_that_kills_its_worker_is_set_aside_and_no_other(
    folder: Path, processes: Workshop
) -> None:
    intake, results = run_intake(folder, die_of_m03, workshop=processes)
    aside = {(n.file, n.code) for n in intake.notices if n.weight == "set aside"}
    assert aside == {(file, "reader-died") for file in of_module("M03")}
    others = {key: found for key, found in run_intake(folder, largest)[1].items() if "M03" not in key[0]}
    assert results == others
    assert intake.counts.add_up


def test_a_recording_on_which_the_program_fails_is_set_aside_in_the_same_words_everywhere(
    folder: Path, processes: Workshop
) -> None:
    alone = run_intake(folder, fail_on_m03)
    shared = run_intake(folder, fail_on_m03, workshop=processes)
    assert same(alone, shared)
    failed = [(n.file, n.code, n.what) for n in alone[0].notices if n.weight == "set aside"]
    what = "the program failed on this file (IndexError in recordings/reading_step.py, line "
    assert [(file, code) for file, code, _ in failed] == [(f, "reading-failed") for f in of_module("M03")]
    assert all(words.startswith(what) for *_, words in failed)
    assert len(alone[1]) == 9


def test_a_failure_while_several_are_read_together_costs_only_one(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def failing(items: Sequence[RecordingBytes], description: Description) -> list[ReadOutcome]:
        if any(item.file == name("M02", 1) for item in items):
            raise ZeroDivisionError
        return read_recordings(items, description)

    monkeypatch.setattr(reading_step, "read_recordings", failing)
    intake, results = run_intake(folder, largest)
    assert [n.file for n in intake.notices if n.code == "reading-failed"] == [name("M02", 1)]
    assert len(results) == 11


class Elsewhere(ThisProcess):
    """A worker on a machine that does not see some of the files."""

    apart = True

    def submit(self, function: Callable[[ReadingTask], object], task: ReadingTask) -> Future[object]:
        lost = tuple(
            replace(r, file=replace(r.file, location=Path("/nowhere"))) if "M02" in r.file.file else r
            for r in task.recordings
        )
        return super().submit(function, replace(task, recordings=lost))


def test_what_a_worker_elsewhere_cannot_open_is_read_here(folder: Path) -> None:
    found = run_intake(folder, largest, workshop=Workshop(Elsewhere()))
    assert same(found, run_intake(folder, largest))


# ---------------------------------------------------------------- what is known already


def kept(folder: Path, file: Path, reduce: Reduction = largest) -> tuple[Intake, Results]:
    with Store(file) as store:
        return run_intake(folder, reduce, workshop=Workshop(store=store))


def change(folder: Path, file: str, old: str, new: str) -> None:
    text = (folder / file).read_text(encoding="utf-8")
    assert old in text
    (folder / file).write_text(text.replace(old, new, 1), encoding="utf-8")


CHANGES: dict[str, tuple[tuple[str, str, str], list[str]]] = {
    "nothing": (("modules.csv", "M01", "M01"), []),
    "the title": (("campaign.toml", "Test campaign", "Another title"), []),
    "the use": (("campaign.toml", "[recordings]", '[use]\nrate = "1 mm/s"\n[recordings]'), []),
    "one recording": ((name("M02", 2), "60.0,", "60.5,"), [name("M02", 2)]),
    "a generation": (("modules.csv", "M03,first", "M03,second"), of_module("M03")),
    "the fate of a sensor": (("sensors.csv", "M01,AB,60,", "M01,AB,60,torn"), of_module("M01")),
    "a rest length": (("sensors.csv", "M04,AB,60", "M04,AB,61"), of_module("M04")),
    "another sensor of the module": (
        ("sensors.csv", "M02,AB,60,", "M02,AB,60,\nM02,BC,60,"),
        of_module("M02"),
    ),
    "a module nobody has": (("modules.csv", "M04,first\n", "M04,first\nM05,first\n"), []),
    "a session": (("trials.csv", "S1", "S2"), [name("M01", 1)]),
    "a row of another trial": (("trials.csv", "S1\n", f"S1\n{name('M02', 3)},S9\n"), [name("M02", 3)]),
    "a module that is not listed": (("modules.csv", "M04,first\n", ""), of_module("M04")),
    "a column": (
        ("campaign.toml", "[recordings]", '[[columns]]\nheader="x"\nquantity="ignore"\n[recordings]'),
        of_module(*MODULES),
    ),
    "a word for a kind": (
        ("campaign.toml", "[recordings]", '[recordings.kinds]\nstep = "staircase"\n[recordings]'),
        of_module(*MODULES),
    ),
}


@pytest.mark.parametrize("what", CHANGES)
def test_a_change_costs_what_it_steers_and_gives_what_scratch_gives(
    what: str, folder: Path, parsed: list[str], tmp_path: Path
) -> None:
    store = tmp_path / "results.sqlite"
    kept(folder, store)
    parsed.clear()
    (file, old, new), expected = CHANGES[what]
    change(folder, file, old, new)
    rebuilt = kept(folder, store)
    assert parsed == expected
    assert same(rebuilt, run_intake(folder, largest))


def test_what_was_known_before_the_last_change_is_known_still(
    folder: Path, parsed: list[str], tmp_path: Path
) -> None:
    store = tmp_path / "results.sqlite"
    first = kept(folder, store)
    change(folder, name("M02", 2), "60.0,", "60.5,")
    kept(folder, store)
    change(folder, name("M02", 2), "60.5,", "60.0,")
    parsed.clear()
    assert same(kept(folder, store), first)
    assert parsed == []


def test_the_same_bytes_under_another_name_are_read_again(
    folder: Path, parsed: list[str], tmp_path: Path
) -> None:
    store = tmp_path / "results.sqlite"
    kept(folder, store)
    parsed.clear()
    (folder / name("M01", 3)).rename(folder / name("M01", 4))
    results = kept(folder, store)[1]
    assert parsed == [name("M01", 4)]
    assert (name("M01", 4), "AB", 4) in results


def test_another_reduction_finds_nothing_of_this_one(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "results.sqlite"
    kept(folder, store)
    assert same(kept(folder, store, smallest), run_intake(folder, smallest))


def test_another_program_finds_nothing_of_this_one(
    folder: Path, parsed: list[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    store = tmp_path / "results.sqlite"
    kept(folder, store)
    parsed.clear()
    monkeypatch.setattr(shared_reading, "program_digest", lambda: "another")
    kept(folder, store)
    assert len(parsed) == len(RECORDINGS)


def test_what_could_not_be_read_is_tried_again(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Neither a file that was gone nor one on which the program failed is remembered as such."""
    store = tmp_path / "results.sqlite"

    def gone(task: ReadingTask) -> tuple[StepResult, ...]:
        missing = tuple(
            replace(r, file=replace(r.file, location=Path("/nowhere"))) for r in task.recordings[:2]
        )
        return reading_step.read_task(replace(task, recordings=missing + task.recordings[2:]))

    monkeypatch.setattr(shared_reading, "read_task", gone)
    intake, _ = kept(folder, store)
    assert [n.code for n in intake.notices if n.weight == "set aside"] == ["vanished"] * 2
    monkeypatch.undo()
    with Store(store) as keeping:
        run_intake(folder, fail_on_m03, workshop=Workshop(store=keeping))
    assert same(kept(folder, store), run_intake(folder, largest))


def test_a_damaged_store_changes_nothing(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "results.sqlite"
    expected = kept(folder, store)
    for place in range(0, store.stat().st_size, 997):
        data = bytearray(store.read_bytes())
        data[place] ^= 0x10
        store.write_bytes(data)
        assert same(kept(folder, store), expected)


def test_processes_use_what_is_known(folder: Path, tmp_path: Path, processes: Workshop) -> None:
    store = tmp_path / "results.sqlite"
    expected = kept(folder, store)
    change(folder, name("M02", 2), "60.0,", "60.5,")
    with Store(store) as keeping:
        found = run_intake(folder, largest, workshop=replace(processes, store=keeping))
    assert same(found, run_intake(folder, largest))
    assert not same(found, expected)


# ---------------------------------------------------------------- what steers


def test_reading_is_given_nothing_that_does_not_steer(folder: Path) -> None:
    """What a worker is given is the same whatever else the description says, so it cannot depend on it."""
    description, registers = load_description(folder), read_registers(folder)
    filled = replace(
        description,
        title="another",
        authors=(Author("somebody"),),
        limits={"linearity": (0.02, "1")},
        simulated=True,
        use={"rate": "1 mm/s"},
        plan={"x": 1},
    )
    rules, others = naming_rules(description, registers), naming_rules(filled, registers)
    assert steering_rules(rules, []) == steering_rules(others, [])
    assert campaign_steering(rules) == campaign_steering(others)
    assert {field.name for field in fields(Description)} >= NOT_STEERING


@pytest.mark.parametrize("field", sorted({f.name for f in fields(Description)} - NOT_STEERING))
def test_whatever_else_is_described_steers(field: str) -> None:
    """A field that is new to the description steers until somebody says that it does not."""
    plain = Description("a")
    other = replace(plain, **{field: "something else"})
    empty = read_registers(Path("/nowhere"))
    rules = naming_rules(plain, empty)
    assert campaign_steering(rules) != campaign_steering(replace(rules, description=other))


def test_only_rows_of_the_recordings_of_a_task_go_with_it(folder: Path) -> None:
    rules = naming_rules(load_description(folder), read_registers(folder))
    assert len(steering_rules(rules, [name("M01", 1)]).trial_rows) == 1
    assert steering_rules(rules, [name("M01", 2)]).trial_rows == {}


def test_endurance_can_be_kept() -> None:
    """The kinds of the demonstration are kept in the tests of whole runs."""
    features = features_of_endurance(endurance())
    again = decode(encode(features))
    assert isinstance(again, type(features))
    pd.testing.assert_frame_equal(again.cycles, features.cycles, check_exact=True)
    assert repr(again.identity) == repr(features.identity)


# ---------------------------------------------------------------- when sharing is worth it


def test_few_bytes_are_read_by_this_process_unless_workers_are_asked_for(folder: Path) -> None:
    with open_workshop(folder, "campaign.toml", ignore_cache=True) as workshop:
        assert isinstance(workshop.crew_for(1_000_000), ThisProcess)
        assert workshop.crew_for(10**10) is workshop.crew
    with open_workshop(folder, "campaign.toml", workers=3, ignore_cache=True) as workshop:
        assert workshop.crew_for(1) is workshop.crew
        assert workshop.crew.hands == 3
    with open_workshop(folder, "campaign.toml", workers=1, ignore_cache=True) as workshop:
        assert isinstance(workshop.crew_for(10**10), ThisProcess)
