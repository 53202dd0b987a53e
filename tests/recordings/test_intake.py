"""Intake: every recording read once, every file accounted for, trials reduced while they are in memory."""

from __future__ import annotations

import csv
import hashlib
import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from campaign.notices import NOTICE_CODES
from campaign.recordings.intake import Intake, NothingUsable, inspect_folder, run_intake
from campaign.recordings.intake_tables import NOTICE_COLUMNS, RECORDING_COLUMNS, TRIAL_COLUMNS, notices_table
from campaign.recordings.recording import Trial
from campaign.recordings.shared_reading import BATCH_FILES

CampaignMaker = Callable[..., Path]
StaircaseMaker = Callable[..., str]
CAMPAIGNS = Path(__file__).parents[1] / "campaigns"
HOSTILE = CAMPAIGNS / "hostile"
EXPECTATIONS = list(csv.DictReader((HOSTILE / "expectations.csv").read_text(encoding="utf-8").splitlines()))
ONE = "trials/M01_AB_staircase_r1.csv"
TWO = "trials/M01_AB_staircase_r2.csv"
THREE = "trials/M01_AB_staircase_r3.csv"


def fates(intake: Intake) -> dict[str, str]:
    return dict(zip(intake.recordings["file"], intake.recordings["fate"], strict=True))


def codes(intake: Intake) -> list[str]:
    return [notice.code for notice in intake.notices]


def of_code(intake: Intake, code: str) -> list[tuple[str | None, str]]:
    return [(notice.file, notice.what) for notice in intake.notices if notice.code == code]


# ---------------------------------------------------------------- tables and counts


def test_tables_have_the_columns_of_the_site(make_campaign: CampaignMaker, staircase: StaircaseMaker) -> None:
    registers = {
        "modules.csv": "module,generation,batch\nM01,first,B1\nM02,second,B2\n",
        "sensors.csv": "module,sensor,rest_length,position\nM01,AB,60,edge\n",
        "sessions.csv": "session,module,started\n1,M01,2026-03-01\n",
    }
    folder = make_campaign({ONE: staircase(), TWO: staircase(1), "readme.txt": "x", **registers})
    intake = inspect_folder(folder)
    assert tuple(intake.recordings.columns) == RECORDING_COLUMNS
    assert tuple(intake.trials.columns) == TRIAL_COLUMNS
    assert tuple(notices_table(intake.notices).columns) == NOTICE_COLUMNS
    row = intake.recordings.set_index("file").loc[ONE]
    assert row["sha256"] == hashlib.sha256((folder / ONE).read_bytes()).hexdigest()
    assert (row["kind"], row["fate"], row["rows"]) == ("staircase", "used", 7)
    assert intake.trials.iloc[0][["generation", "batch", "module", "sensor"]].tolist() == [
        "first",
        "B1",
        "M01",
        "AB",
    ]
    assert intake.sensors.loc[0, "rest_length_mm"] == 60.0
    assert intake.modules["generation"].tolist() == ["first", "second"]
    assert intake.sessions["started"].tolist() == ["2026-03-01"]
    assert intake.file_hashes["readme.txt"] == hashlib.sha256(b"x").hexdigest()
    assert [identity.position for identity in intake.used_identities] == ["edge", "edge"]


def test_counts_add_up(make_campaign: CampaignMaker, staircase: StaircaseMaker) -> None:
    files = {ONE: staircase(), TWO: staircase(), THREE: "", "trials/unnamed.csv": staircase(2), "a.txt": "x"}
    intake = inspect_folder(make_campaign(files))
    counts = intake.counts
    assert (counts.files, counts.used, counts.set_aside, counts.not_recordings) == (6, 1, 3, 2)
    assert counts.add_up
    assert (counts.trials, counts.trials_used) == (2, 1)
    assert len(intake.recordings) == counts.files


def test_every_code_is_explained(make_campaign: CampaignMaker, staircase: StaircaseMaker) -> None:
    files = {
        ONE: staircase(),
        TWO: staircase(),
        THREE: "",
        "trials/x.csv": staircase(3),
        "trials/M01_hold_r1.csv": "z",
    }
    assert set(codes(inspect_folder(make_campaign(files)))) <= set(NOTICE_CODES)


def test_what_is_used_but_not_listed_has_a_row_in_the_registers(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    folder = make_campaign({ONE: staircase(), "sensors.csv": "module,sensor,rest_length\nM09,XY,40\n"})
    intake = inspect_folder(folder)
    assert intake.modules["module"].tolist() == ["M01"]
    assert intake.modules["generation"].tolist() == ["generation 1"]
    assert intake.sensors["sensor"].tolist() == ["XY", "AB"]
    assert math.isnan(intake.sensors.loc[1, "rest_length_mm"])
    assert "sensor-not-listed" in codes(intake)
    assert "generation-assumed" in codes(intake)


# ---------------------------------------------------------------- streaming


def test_trials_are_reduced_while_streaming(make_campaign: CampaignMaker, staircase: StaircaseMaker) -> None:
    folder = make_campaign({ONE: staircase(), TWO: staircase(1)})
    seen: list[tuple[str, int, int]] = []
    intake, results = run_intake(
        folder, lambda trial: float(trial.signal.max()), progress=lambda *said: seen.append(said)
    )
    assert results == {(ONE, "AB", 1): 127.0, (TWO, "AB", 2): 128.0}
    assert set(results) == intake.used
    size = sum(intake.recordings.set_index("file").loc[[ONE, TWO], "bytes"])
    assert seen == [("reading", 0, size), ("reading", size, size)]


def test_only_results_of_used_trials_are_kept(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    trials = f"file,use,reason\n{TWO},no,slipped in the clamp\n"
    folder = make_campaign({ONE: staircase(), TWO: staircase(1), THREE: staircase(), "trials.csv": trials})
    intake, results = run_intake(folder, lambda trial: trial.identity.repetition)
    assert results == {(ONE, "AB", 1): 1}
    _, with_put_back = run_intake(folder, lambda trial: trial.identity.repetition, keep_put_back=True)
    assert with_put_back == {(ONE, "AB", 1): 1, (TWO, "AB", 2): 2}
    assert intake.put_back == {(TWO, "AB", 2)}


def test_many_files_in_one_folder_are_read_in_batches(make_campaign: CampaignMaker) -> None:
    text = "length_mm,capacitance_pF\n60,100\n66,110\n72,12"
    many = BATCH_FILES + 700
    files = {f"trials/M{i:04d}_AB_staircase_r1.csv": f"{text}{i}\n" for i in range(many)}
    said: list[int] = []
    intake, results = run_intake(
        make_campaign(files),
        lambda trial: trial.signal[-1],
        progress=lambda what, done, total: said.append(done),
    )
    assert intake.counts.used == many
    assert results["trials/M1199_AB_staircase_r1.csv", "AB", 1] == 121199
    assert intake.counts.add_up
    assert len(said) == 4


# ---------------------------------------------------------------- across recordings


def test_the_same_bytes_under_two_names_are_one_recording(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    intake = inspect_folder(make_campaign({ONE: staircase(), TWO: staircase(), THREE: staircase(1)}))
    assert fates(intake)[ONE] == "used"
    assert fates(intake)[TWO] == "set aside"
    assert of_code(intake, "copy") == [(TWO, f"the same bytes as {ONE}")]
    assert intake.counts.trials_used == 2


def test_a_copy_that_nobody_can_name_does_not_stand_for_the_recording(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    intake = inspect_folder(make_campaign({"trials/A copy.csv": staircase(), ONE: staircase()}))
    assert fates(intake)[ONE] == "used"
    assert fates(intake)["trials/A copy.csv"] == "set aside"


def test_two_recordings_that_claim_to_be_one_trial_are_both_set_aside(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    rival = "trials/again/M01_AB_staircase_r1.csv"
    intake = inspect_folder(make_campaign({ONE: staircase(), rival: staircase(1), TWO: staircase(2)}))
    assert [fates(intake)[name] for name in (ONE, rival, TWO)] == ["set aside", "set aside", "used"]
    named = dict(of_code(intake, "rival-claim"))
    assert rival in named[ONE]
    assert ONE in named[rival]


def test_runs_at_other_set_points_are_no_rivals(make_campaign: CampaignMaker, minimal: str) -> None:
    description = minimal.replace("_r{repetition}", "_{length}")
    rows = "time_s,capacitance_pF,length_mm\n" + "".join(f"{i},10{i},{{0}}\n" for i in range(5))
    files = {f"trials/M01_AB_hold_{mm}mm.csv": rows.format(mm) for mm in (60, 70)}
    intake = inspect_folder(make_campaign(files, description))
    assert intake.counts.used == 2
    assert "repetition-assumed" in codes(intake)


def test_sessions_part_claims(make_campaign: CampaignMaker, staircase: StaircaseMaker, minimal: str) -> None:
    description = minimal.replace("_r{repetition}", "_r{repetition}_s{session}")
    files = {f"trials/M01_AB_staircase_r1_s{s}.csv": staircase(s) for s in (1, 2)}
    assert inspect_folder(make_campaign(files, description)).counts.used == 2


def test_nothing_usable_stops_and_still_shows_everything(make_campaign: CampaignMaker) -> None:
    with pytest.raises(NothingUsable) as stops:
        inspect_folder(make_campaign({ONE: "", TWO: "only words\n"}))
    intake = stops.value.intake
    assert [n.code for n in stops.value.notices] == ["no-usable-trial"]
    assert intake.notices[0].code == "no-usable-trial"
    assert intake.counts.set_aside == 2
    assert intake.counts.add_up


def test_left_out_by_request_is_not_unasked(make_campaign: CampaignMaker, staircase: StaircaseMaker) -> None:
    files = {ONE: staircase(), TWO: staircase(1), "trials.csv": f"file,use,reason\n{TWO},no,knocked\n"}
    intake = inspect_folder(make_campaign(files))
    assert fates(intake)[TWO] == "set aside"
    assert intake.set_aside_unasked == 0
    assert inspect_folder(make_campaign({THREE: ""})).set_aside_unasked == 1


def test_rows_for_files_that_are_not_there_are_noted_with_the_nearest(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    trials = "file,session\ntrials/M01_AB_stairs_r1.csv,1\nreadme.txt,2\n"
    intake = inspect_folder(make_campaign({ONE: staircase(), "readme.txt": "x", "trials.csv": trials}))
    [missing] = [n for n in intake.notices if n.code == "register-file-missing"]
    assert (missing.file, missing.line) == ("trials.csv", 2)
    assert ONE in missing.remedy
    assert [n.line for n in intake.notices if n.code == "register-file-unnamed"] == [3]


def test_some_recordings_naming_a_generation_sets_the_others_aside(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    files = {ONE: "# generation: first\n" + staircase(), TWO: staircase(1)}
    intake = inspect_folder(make_campaign(files))
    assert (fates(intake)[ONE], fates(intake)[TWO]) == ("used", "set aside")
    assert "generation-missing" in codes(intake)


def test_an_id_that_a_register_refuses_sets_its_trials_aside_once(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    modules = "module,generation\nM01,=first\nM02,second\n"
    files = {ONE: staircase(), "trials/M02_AB_staircase_r1.csv": staircase(1), "modules.csv": modules}
    intake = inspect_folder(make_campaign(files))
    assert fates(intake)[ONE] == "set aside"
    assert [n.code for n in intake.notices if n.file == ONE] == ["register-row-refused"]


def test_ids_that_differ_in_case_only_are_kept_apart_and_noted(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    files = {ONE: staircase(), "trials/m01_AB_staircase_r1.csv": staircase(1)}
    intake = inspect_folder(make_campaign(files))
    assert intake.counts.used == 2
    assert intake.modules["module"].tolist() == ["M01", "m01"]
    assert "'M01'" in of_code(intake, "id-twins")[0][1]


@pytest.mark.parametrize("name", ["../../../etc", "a/b", "C:\\x", "x" * 300, "M 'q' \"01\"", "模块"])
def test_ids_like_paths_are_kept_as_text(
    make_campaign: CampaignMaker, staircase: StaircaseMaker, name: str
) -> None:
    quoted = name.replace('"', '""')
    folder = make_campaign({ONE: staircase(), "trials.csv": f'file,module\n{ONE},"{quoted}"\n'})
    description = (folder / "campaign.toml").read_text().replace("{module}", "{ignore}")
    (folder / "campaign.toml").write_text(description)
    intake = inspect_folder(folder)
    assert intake.trials["module"].tolist() == [name]


def test_patterns_and_tables_that_match_nothing_are_noted(
    make_campaign: CampaignMaker, staircase: StaircaseMaker, minimal: str
) -> None:
    more = minimal.replace('files = "trials/**/*.csv"', 'files = ["trials/**/*.csv", "more/*.csv"]')
    more = more.replace('name = "', 'name = ["{session}/{module}/{batch}", "').replace(
        'r{repetition}"', 'r{repetition}"]'
    )
    more += "[[columns]]\nheader = 'nowhere'\nquantity = 'ignore'\n"
    intake = inspect_folder(make_campaign({ONE: staircase()}, more))
    assert {"files-match-nothing", "name-matches-nothing", "columns-match-nothing"} <= set(codes(intake))


def test_a_pattern_that_matches_everything_sets_aside_what_is_no_recording(
    make_campaign: CampaignMaker, staircase: StaircaseMaker, minimal: str
) -> None:
    files = {ONE: staircase(), "photo.jpg": b"\xff\xd8\xff\xe0" * 20, "notes/a.md": "# Words\n\nand more.\n"}
    intake = inspect_folder(make_campaign(files, minimal.replace("trials/**/*.csv", "**")))
    assert fates(intake) == {
        ONE: "used",
        "campaign.toml": "not a recording",
        "notes/a.md": "set aside",
        "photo.jpg": "set aside",
    }
    assert intake.counts.add_up


def test_a_name_pattern_that_matches_everything_makes_every_name_a_module(
    make_campaign: CampaignMaker, staircase: StaircaseMaker
) -> None:
    description = (
        "format = 1\n[recordings]\nfiles = '*.csv'\nname = '{module}'\n"
        "same = { sensor = 'AB', kind = 'staircase', repetition = 1 }\n"
    )
    intake = inspect_folder(make_campaign({"a.csv": staircase(), "b c.csv": staircase(1)}, description))
    assert intake.trials["module"].tolist() == ["a", "b c"]


def test_columns_left_alone_are_listed(
    make_campaign: CampaignMaker, staircase: StaircaseMaker, minimal: str
) -> None:
    text = staircase().replace("_pF\n", "_pF,model a,model b\n").replace("0\n", "0,1,2\n")
    intake = inspect_folder(
        make_campaign({ONE: text}, minimal + "[[columns]]\nheader = 'model *'\nquantity = 'ignore'\n")
    )
    assert intake.left_alone == (("model a", 1), ("model b", 1))
    assert of_code(intake, "left-alone") == [(None, "columns to be left alone: 'model a', 'model b'")]


# ---------------------------------------------------------------- hostile and real folders


def hostile_bytes(name: str) -> bytes:
    """Bytes of a hostile recording; the field of 1 MB is made here rather than kept."""
    if name != "46_huge_field.csv":
        return (HOSTILE / "recordings" / name).read_bytes()
    clean = (HOSTILE / "recordings" / "01_clean.csv").read_text(encoding="utf-8")
    return clean.replace("83.2458", "8" * 1_000_000, 1).encode()


@pytest.mark.parametrize("row", EXPECTATIONS, ids=lambda row: row["file"])
def test_a_hostile_recording_as_a_campaign_of_its_own(
    make_campaign: CampaignMaker, row: dict[str, str]
) -> None:
    data = hostile_bytes(row["file"])
    description = (
        'format = 1\n[campaign]\ntitle = "hostile"\n[recordings]\nfiles = "*.csv"\n'
        'same = { module = "M01", sensor = "S02", kind = "staircase", repetition = 1 }\n'
        '[recordings.kinds]\nstep = "staircase"\n'
    ).replace('kind = "staircase"', 'kind = "step"')
    folder = make_campaign({row["file"]: data}, description)
    try:
        intake = inspect_folder(folder)
    except NothingUsable as stops:
        intake = stops.intake
    assert fates(intake)[row["file"]] == row["fate"].split(",")[0]
    assert intake.counts.add_up
    assert intake.counts.files == 2


def test_the_soft_cell_is_read_through_its_description_alone() -> None:
    kept: dict[int, Trial] = {}
    intake, _ = run_intake(
        CAMPAIGNS / "real" / "soft_capacitive_cell",
        lambda trial: kept.setdefault(trial.identity.repetition, trial),
    )
    assert intake.counts.used == 1
    assert sorted(kept) == [1, 2, 3]
    for trial in kept.values():
        assert (trial.reference, trial.signal_unit, trial.identity.kind) == ("length", "pF", "staircase")
        assert trial.length_mm is not None
        assert trial.strain is None
        assert (trial.length_mm[0], trial.length_mm.min(), trial.length_mm[-1]) == (6.0, -1.5, 6.0)
    np.testing.assert_array_equal(kept[1].signal[[0, 15, -1]], [1.07, 3.67, 1.08])
    np.testing.assert_array_equal(kept[2].signal[[0, 15, -1]], [1.16, 3.6, 1.16])
    np.testing.assert_array_equal(kept[3].signal[[0, 15, -1]], [1.167, 3.11, 1.17])
    assert "rest-length-unknown" in codes(intake)
    assert not any(notice.weight == "set aside" for notice in intake.notices)


def test_the_pneumatic_seals_are_read_through_their_description_alone() -> None:
    kept: dict[int, Trial] = {}
    intake, _ = run_intake(
        CAMPAIGNS / "real" / "pneumatic_seals",
        lambda trial: kept.setdefault(trial.identity.repetition, trial),
    )
    assert intake.counts.used == 2
    first = kept[1]
    assert (first.identity.module, first.identity.kind, first.signal_unit) == ("O-ring257", "cyclic", "N")
    assert first.time_s is not None
    assert first.elongation_mm is not None
    assert first.pressure_kpa is not None
    assert (len(first.signal), first.signal[0]) == (5693, 55.746)
    np.testing.assert_allclose(first.time_s[:3], [0, 0.01, 0.02], rtol=1e-12)
    assert first.pressure_kpa[0] == pytest.approx(100.8)
    assert not any(notice.weight == "set aside" for notice in intake.notices)


def test_real_recordings_are_unaltered() -> None:
    hashes = {  # SHA-256, in two halves
        "soft_capacitive_cell/steps.csv": "810165427d2a63ff258a3a479e137a07340e0828e7eee792930cd2d74bea41be",
        "pneumatic_seals/1_O-ring257_1bar.csv": "f229a88ce467653938510809c02f5349"
        "071be4277b9159fc2478846360ef2c9c",
        "pneumatic_seals/3_O-ring257_1bar.csv": "e65b0d8ddd5075aa72bd9ad3ebd5ada4"
        "037c4e22eb30852b1532f2329e872e26",
    }
    for name, expected in hashes.items():
        assert hashlib.sha256((CAMPAIGNS / "real" / name).read_bytes()).hexdigest() == expected
