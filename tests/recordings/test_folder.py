"""The campaign folder: every file on exactly one list, whatever stands in it."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.notices import CampaignStops
from campaign.pages.output import MARKER
from campaign.recordings.file_glob import leaves_the_folder, matches_glob
from campaign.recordings.folder import (
    LARGEST_RECORDING_BYTES,
    OUTPUT_MARKER,
    Survey,
    list_files,
    survey_folder,
)
from campaign.recordings.intake import inspect_folder
from campaign.recordings.reading_step import open_recording

CampaignMaker = Callable[..., Path]
NAME = "trials/M01_AB_staircase_r1.csv"
OTHER = "trials/M01_AB_staircase_r2.csv"


def lists(survey: Survey) -> dict[str, str]:
    return {file.file: file.list for file in survey.files}


def codes(survey: Survey) -> list[tuple[str, str | None]]:
    return [(notice.code, notice.file) for notice in survey.notices]


@contextmanager
def without_privileges() -> Iterator[None]:
    """Act as an ordinary user, whom permissions bind, where the tests run as the superuser."""
    if os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


# ---------------------------------------------------------------- patterns


@pytest.mark.parametrize(
    ("pattern", "path", "matches"),
    [
        ("trials/**/*.csv", "trials/a.csv", True),
        ("trials/**/*.csv", "trials/x/y/a.csv", True),
        ("trials/**/*.csv", "other/a.csv", False),
        ("*.csv", "a/b.csv", False),
        ("**", "a/b/c.txt", True),
        ("runs/seal_?.csv", "runs/seal_1.csv", True),
        ("[!a]*.csv", "b.csv", True),
        ("[!a]*.csv", "a.csv", False),
        ("**/*.csv", ".git/a.csv", False),
        ("**/*.csv", "a/.hidden.csv", False),
        (".hidden/*.csv", ".hidden/a.csv", True),
        ("a+(b).csv", "a+(b).csv", True),
        ("*.csv", "a.CSV", False),
    ],
)
def test_patterns_of_files(pattern: str, path: str, matches: bool) -> None:
    assert matches_glob(path, pattern) == matches


@given(st.text("ab/*?", max_size=12), st.text("ab/.", max_size=12))
def test_any_pattern_can_be_held_against_any_path(pattern: str, path: str) -> None:
    assert matches_glob(path, pattern) in (True, False)


@given(st.text(st.characters(exclude_characters="/*?[.\\"), min_size=1, max_size=20))
def test_a_plain_name_is_its_own_pattern(name: str) -> None:
    assert matches_glob(name, name)
    assert matches_glob(f"a/b/{name}", f"**/{name}")


def test_patterns_that_leave_the_folder() -> None:
    assert all(map(leaves_the_folder, ["../a", "/a", "a/../../b", "C:\\a", "\\a"]))
    assert not leaves_the_folder("a/..b/c")


# ---------------------------------------------------------------- lists


def test_every_file_is_on_one_list(make_campaign: CampaignMaker, staircase: Callable[..., str]) -> None:
    folder = make_campaign(
        {NAME: staircase(), "notes/a.md": "x", "modules.csv": "module\nM01\n", "photo.jpg": b"\xff"}
    )
    survey = survey_folder(folder)
    assert lists(survey) == {
        NAME: "recording",
        "campaign.toml": "not a recording",
        "modules.csv": "not a recording",
        "notes/a.md": "not a recording",
        "photo.jpg": "not a recording",
    }
    assert {f.file: f.what for f in survey.files if f.what} == {
        "campaign.toml": "description",
        "modules.csv": "register",
        "notes/a.md": "note",
        "photo.jpg": "other file",
    }


def test_registers_and_description_are_never_recordings(make_campaign: CampaignMaker, minimal: str) -> None:
    everything = minimal.replace("trials/**/*.csv", "**")
    survey = survey_folder(make_campaign({"modules.csv": "module\nM01\n", "a.csv": "x"}, everything))
    assert [file.file for file in survey.recordings] == ["a.csv"]


def test_a_pattern_that_matches_nothing_stops_and_says_what_is_there(
    make_campaign: CampaignMaker, minimal: str
) -> None:
    folder = make_campaign({"data/a.txt": "x", "data/b.txt": "y"}, minimal)
    with pytest.raises(CampaignStops) as stops:
        survey_folder(folder)
    [notice] = stops.value.notices
    assert notice.code == "no-recordings"
    assert "2 with .txt" in notice.what


def test_description_and_registers_stop_together(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({"modules.csv": "modul\nM01\n", "trials.csv": "file,file\na,b\n"}, "format = 3\n")
    with pytest.raises(CampaignStops) as stops:
        survey_folder(folder)
    assert [n.code for n in stops.value.notices] == [
        "unknown-format",
        "register-column-missing",
        "register-column-twice",
    ]


def test_another_campaign_inside_is_one_line(make_campaign: CampaignMaker, minimal: str) -> None:
    inner = {"trials/old/campaign.toml": minimal, "trials/old/a.csv": "x", "trials/old/deep/b.csv": "y"}
    survey = survey_folder(make_campaign({NAME: "x", **inner}))
    assert survey.other_campaigns == ("trials/old",)
    assert set(lists(survey)) == {NAME, "campaign.toml"}
    assert codes(survey) == [("another-campaign", "trials/old/")]


def test_an_output_folder_inside_is_not_counted(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({NAME: "x", "site/index.html": "y", "old_site/index.html": "z"})
    (folder / "old_site" / OUTPUT_MARKER).write_text("ours")
    survey = survey_folder(folder, folder / "site")
    assert set(lists(survey)) == {NAME, "campaign.toml"}
    assert codes(survey) == [("own-output", "old_site/")]


def test_the_marker_is_the_one_that_sites_carry() -> None:
    assert OUTPUT_MARKER == MARKER


def test_links_are_not_followed(make_campaign: CampaignMaker, tmp_path: Path) -> None:
    outside = tmp_path / "outside"
    outside.mkdir()
    (outside / "a.csv").write_text("secret")
    folder = make_campaign({NAME: "x"})
    (folder / "trials" / "linked").symlink_to(outside)
    (folder / "trials" / "M01_AB_hold_r1.csv").symlink_to(outside / "a.csv")
    (folder / "trials" / "loop").symlink_to(folder)
    (folder / "dangling.md").symlink_to(tmp_path / "nowhere")
    survey = survey_folder(folder)
    assert lists(survey) == {
        NAME: "recording",
        "campaign.toml": "not a recording",
        "dangling.md": "not a recording",
        "trials/M01_AB_hold_r1.csv": "set aside",
        "trials/linked": "not a recording",
        "trials/loop": "not a recording",
    }
    weights = {n.file: n.weight for n in survey.notices if n.code == "link"}
    assert weights == {
        "trials/M01_AB_hold_r1.csv": "set aside",
        "trials/linked": "set aside",
        "trials/loop": "set aside",
        "dangling.md": "noted",
    }


def test_a_pipe_under_a_recordings_name_is_never_opened(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({NAME: "x"})
    os.mkfifo(folder / OTHER)
    survey = survey_folder(folder)
    assert lists(survey)[OTHER] == "set aside"
    assert ("no-ordinary-file", OTHER) in codes(survey)


def test_a_recording_of_two_gigabytes_is_set_aside_unread(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({NAME: "x"})
    with (folder / OTHER).open("wb") as stream:
        stream.truncate(2 * LARGEST_RECORDING_BYTES)
    survey = survey_folder(folder)
    assert lists(survey)[OTHER] == "set aside"
    assert ("too-large", OTHER) in codes(survey)


def test_a_folder_that_cannot_be_opened_is_noted_and_the_rest_is_read(staircase: Callable[..., str]) -> None:
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        folder.chmod(0o755)
        (folder / "campaign.toml").write_text(
            "format=1\n[campaign]\ntitle='t'\n[recordings]\nfiles='**/*.csv'\n"
        )
        (folder / "closed").mkdir()
        (folder / "closed" / "a.csv").write_text(staircase())
        (folder / "b.csv").write_text(staircase())
        (folder / "c.csv").write_text(staircase())
        (folder / "closed").chmod(0)
        (folder / "c.csv").chmod(0)
        with without_privileges():
            survey = survey_folder(folder)
            opened = {file.file: open_recording(file) for file in survey.recordings}
        (folder / "closed").chmod(0o755)
    assert set(lists(survey)) == {"b.csv", "c.csv", "campaign.toml"}
    assert [(n.code, n.file, n.weight) for n in survey.notices] == [
        ("unreadable-folder", "closed/", "set aside")
    ]
    assert opened["b.csv"][1] is None
    data, notice = opened["c.csv"]
    assert data is None
    assert notice is not None
    assert (notice.code, notice.weight) == ("unreadable-file", "set aside")


def test_a_file_that_vanishes_is_set_aside(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({NAME: "x"})
    [file] = survey_folder(folder).recordings
    (folder / NAME).unlink()
    data, notice = open_recording(file)
    assert data is None
    assert notice is not None
    assert (notice.code, notice.file) == ("vanished", NAME)


def test_a_file_that_grows_is_set_aside(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({NAME: "1,2\n"})
    [file] = survey_folder(folder).recordings
    with (folder / NAME).open("a") as stream:
        stream.write("3,4\n")
    data, notice = open_recording(file)
    assert data is None
    assert notice is not None
    assert (notice.code, notice.what) == (
        "changed-while-read",
        "the file changed while the folder was read (4 bytes, then 8)",
    )


@pytest.mark.parametrize(
    "name",
    [
        "M 01_A'B_staircase_r1.csv",
        'M"01_A(B)_staircase_r1.csv',
        "模块_边_staircase_r1.csv",
        "M01_" + "x" * 200 + "_staircase_r1.csv",
        "العربية_AB_staircase_r1.csv",
    ],
)
def test_names_of_any_script_are_read(
    make_campaign: CampaignMaker, staircase: Callable[..., str], name: str
) -> None:
    intake = inspect_folder(make_campaign({f"trials/{name}": staircase()}))
    assert intake.counts.used == 1
    assert intake.recordings["file"].tolist()[-1] == f"trials/{name}"


@pytest.mark.parametrize(
    "name",
    [b"M01_A\xe9_staircase_r1.csv", "M01_\u202eAB_staircase_r1.csv".encode(), b"M01_A\nB_staircase_r1.csv"],
)
def test_what_cannot_be_seen_in_a_name_is_spelled_out(
    make_campaign: CampaignMaker, staircase: Callable[..., str], name: bytes
) -> None:
    folder = make_campaign({NAME: staircase()})
    path = os.path.join(os.fsencode(folder / "trials"), name)
    with open(path, "wb") as stream:
        stream.write(staircase(0.5).encode())
    survey = survey_folder(folder)
    [shown] = [file.file for file in survey.recordings if file.file != NAME]
    assert shown.isprintable()
    assert "\\" in shown
    assert codes(survey) == [("name-spelled-out", shown)]
    assert inspect_folder(folder).counts.used == 2


def test_twins_and_near_misses_are_noted(make_campaign: CampaignMaker) -> None:
    files = {
        "trials/a.csv": "1",
        "trials/A.csv": "2",
        "trials/b.CSV": "3",
        "trials/e\u0301.csv": "4",
        "trials/\u00e9.csv": "5",
    }
    survey = survey_folder(make_campaign(files))
    assert sorted(code for code, _ in codes(survey)) == ["case-of-name", "twin-names", "twin-names"]
    assert ("case-of-name", "trials/b.CSV") in codes(survey)


def test_ten_thousand_files_in_one_folder(make_campaign: CampaignMaker) -> None:
    folder = make_campaign({f"trials/M{i}_AB_staircase_r1.csv": b"" for i in range(10_000)})
    survey = survey_folder(folder)
    assert len(survey.recordings) == 10_000
    assert len(survey.files) == 10_001
    assert [file.file for file in survey.files] == sorted(file.file for file in survey.files)


def test_listing_leaves_out_links_and_other_campaigns(make_campaign: CampaignMaker, minimal: str) -> None:
    folder = make_campaign({NAME: "x", "in/campaign.toml": minimal, "in/b.csv": "x"})
    (folder / "link.csv").symlink_to(folder / NAME)
    assert [name for name, _ in list_files(folder)] == ["campaign.toml", NAME]


names = st.lists(
    st.tuples(
        st.sampled_from(["trials/", "trials/x/", "", "notes/"]),
        st.text("abcXY é中'=_-", min_size=1, max_size=6),
    ),
    max_size=12,
)


@given(names)
def test_counts_add_up_for_any_tree(found: list[tuple[str, str]]) -> None:
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        (folder / "campaign.toml").write_text("format = 1\n[recordings]\nfiles = 'trials/**/*.csv'\n")
        written = {"campaign.toml"}
        for number, (prefix, stem) in enumerate(found):
            name = f"{prefix}{stem}{number}.{'csv' if number % 3 else 'txt'}"
            (folder / name).parent.mkdir(exist_ok=True, parents=True)
            (folder / name).write_text("x")
            written.add(name)
        named = {name for name in written if name.startswith("trials/") and name.endswith(".csv")}
        if not named:
            with pytest.raises(CampaignStops):
                survey_folder(folder)
            return
        survey = survey_folder(folder)
        assert {file.file for file in survey.files} == written
        assert {file.file for file in survey.recordings} == named
        assert len(survey.files) == len(written)
