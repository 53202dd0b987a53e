"""The command line: exit statuses, what is said and written, and never a traceback for bad input."""

from __future__ import annotations

import csv
import os
import pty
import re
import shutil
import subprocess
import sys
import termios
from pathlib import Path

import pytest

from campaign import __version__
from campaign.cli import main
from campaign.recordings.beginning import wide_header
from campaign.recordings.description_file import load_description
from campaign.recordings.intake_tables import NOTICE_COLUMNS, RECORDING_COLUMNS, TRIAL_COLUMNS
from campaign.recordings.name_guess import guess_pattern, kind_of_word

CAMPAIGNS = Path(__file__).parent / "campaigns"
DESCRIPTION = """\
format = 1
[campaign]
title = "Test campaign"
[recordings]
files = "trials/*.csv"
name = "{module}_{sensor}_{kind}_r{repetition}"
"""
TABLE = "length_mm,capacitance_pF\n60,100\n66,110\n72,120\n66,111\n60,101\n"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    root = tmp_path / "panels"
    (root / "trials").mkdir(parents=True)
    (root / "campaign.toml").write_text(DESCRIPTION)
    (root / "trials" / "M01_AB_staircase_r1.csv").write_text(TABLE)
    (root / "trials" / "M01_AB_staircase_r2.csv").write_text(TABLE.replace("101", "102"))
    return root


def run(*words: object) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "campaign", *map(str, words)]
    return subprocess.run(command, capture_output=True, text=True, check=False, cwd=Path(__file__).parents[1])


def rows_of(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


# ---------------------------------------------------------------- inspect


def test_inspect_prints_counts_that_add_up(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "trials" / "M01_AB_staircase_r3.csv").write_text(TABLE)
    assert main(["inspect", str(folder)]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    numbers = {line.split()[0]: int(line.split()[-1]) for line in out.splitlines()[2:6]}
    assert numbers == {"files": 4, "used": 2, "set": 1, "no": 1}
    assert "SET ASIDE (1)" in out
    assert "the same bytes as trials/M01_AB_staircase_r1.csv" in " ".join(out.split())


def test_inspect_writes_the_three_tables(folder: Path, tmp_path: Path) -> None:
    tables = tmp_path / "deep" / "tables"
    assert main(["inspect", str(folder), "--tables", str(tables)]) == 0
    assert sorted(path.name for path in tables.iterdir()) == ["notices.csv", "recordings.csv", "trials.csv"]
    recordings, trials, notices = (rows_of(tables / f"{n}.csv") for n in ("recordings", "trials", "notices"))
    assert tuple(recordings[0]) == RECORDING_COLUMNS
    assert tuple(trials[0]) == TRIAL_COLUMNS
    assert tuple(notices[0]) == NOTICE_COLUMNS
    assert [row["fate"] for row in recordings] == ["not a recording", "used", "used"]
    assert main(["inspect", str(folder), "--tables", str(tables)]) == 0


def test_tables_inside_the_folder_are_not_counted_as_its_files(folder: Path) -> None:
    for _ in range(2):
        assert main(["inspect", str(folder), "--tables", str(folder / "tables")]) == 0
    assert len(rows_of(folder / "tables" / "recordings.csv")) == 3


def test_tables_never_overwrite_anything_else(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "trials.csv").write_text("file,session\ntrials/M01_AB_staircase_r1.csv,1\n")
    before = {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    assert main(["inspect", str(folder), "--tables", str(folder)]) == 2
    assert "holds other things" in capsys.readouterr().err
    assert {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()} == before
    assert main(["inspect", str(folder), "--tables", str(folder / "campaign.toml")]) == 2


def test_tables_are_written_even_where_nothing_is_usable(folder: Path, tmp_path: Path) -> None:
    for path in (folder / "trials").iterdir():
        path.write_text("words\n")
    assert main(["inspect", str(folder), "--tables", str(tmp_path / "t")]) == 2
    assert [row["fate"] for row in rows_of(tmp_path / "t" / "recordings.csv")].count("set aside") == 2


@pytest.mark.parametrize("name", ["soft_capacitive_cell", "pneumatic_seals"])
def test_inspect_reads_the_real_folders(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["inspect", str(CAMPAIGNS / "real" / name)]) == 0
    assert "SET ASIDE" not in capsys.readouterr().out


# ---------------------------------------------------------------- bad input


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("format = 1\n[campaign\n", "toml-syntax"),
        ("format = 1\n[campaign]\ntitel = 'x'\n", "did you mean 'title'?"),
        ("format = 1\n[limits]\nlinearity = '2 pF'\n", "wrong-unit"),
        ("format = 1\n[recordings]\nfiles = 'nowhere/*.csv'\n", "no-recordings"),
        (None, "campaign begin"),
    ],
)
@pytest.mark.parametrize("command", ["inspect", "report"])
def test_a_campaign_that_cannot_be_read_ends_with_status_2_and_one_word_why(
    folder: Path, command: str, text: str | None, expected: str, capsys: pytest.CaptureFixture[str]
) -> None:
    if text is None:
        (folder / "campaign.toml").unlink()
    else:
        (folder / "campaign.toml").write_text(text)
    before = sorted(folder.parent.rglob("*"))
    assert main([command, str(folder)]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("STOPS")
    assert expected in err
    assert "Traceback" not in err
    assert sorted(folder.parent.rglob("*")) == before


@pytest.mark.parametrize("command", ["inspect", "report", "begin"])
def test_a_folder_that_is_none_ends_with_status_2(
    command: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "file.csv"
    file.write_text("x")
    for place in (tmp_path / "nowhere", file):
        assert main([command, str(place)]) == 2
        assert "is no folder" in capsys.readouterr().err


@pytest.mark.parametrize(
    "words", [[], ["inspect"], ["report", "a", "b"], ["wibble"], ["inspect", "a", "--fable"]]
)
def test_wrong_words_end_with_status_2(words: list[str]) -> None:
    with pytest.raises(SystemExit) as ended:
        main(words)
    assert ended.value.code == 2


def test_words_that_a_terminal_cannot_show_are_spelled_out(folder: Path) -> None:
    (folder / "trials" / "模块_AB_staircase_r1.csv").write_text("")
    command = [sys.executable, "-m", "campaign", "inspect", str(folder)]
    done = subprocess.run(
        command, capture_output=True, check=False, env=os.environ | {"PYTHONIOENCODING": "ascii"}
    )
    assert done.returncode == 0
    assert b"\\u6a21" in done.stdout
    assert done.stderr == b""


# ---------------------------------------------------------------- the process itself


def test_help_and_version_name_every_command() -> None:
    done = run("--help")
    assert done.returncode == 0
    assert all(command in done.stdout for command in ("report", "inspect", "begin"))
    assert run("--version").stdout == f"campaign {__version__}\n"
    assert "--fail-on-set-aside" in run("report", "--help").stdout
    assert "--tables" in run("inspect", "--help").stdout


def test_help_loads_nothing_heavy() -> None:
    code = "import sys, campaign.cli; print(sorted({'numpy', 'pandas', 'scipy', 'tqdm'} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"


def test_a_closed_pipe_is_no_fault(folder: Path) -> None:
    command = [sys.executable, "-m", "campaign", "inspect", str(folder)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert process.stderr.read() == b""
    assert process.returncode == 0


def test_the_progress_bar_is_silent_unless_on_a_terminal(folder: Path) -> None:
    assert run("inspect", folder).stderr == ""
    ours, theirs = pty.openpty()
    termios.tcsetwinsize(theirs, (24, 80))
    command = [sys.executable, "-m", "campaign", "inspect", str(folder)]
    done = subprocess.run(command, stdout=subprocess.PIPE, stderr=theirs, check=False)
    shown = os.read(ours, 4096)
    os.close(theirs)
    os.close(ours)
    assert done.returncode == 0
    assert b"reading" in shown


# ---------------------------------------------------------------- begin


def test_begin_writes_a_description_that_reads(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "campaign.toml").unlink()
    assert main(["begin", str(folder)]) == 0
    text = (folder / "campaign.toml").read_text()
    description = load_description(folder)
    assert description.files == ("trials/**/*.csv",)
    assert description.names == ("{module}_{sensor}_{kind}_r{repetition}",)
    guessed = [line for line in text.splitlines() if line.startswith(("title", "files", "name"))]
    assert all("# guess" in line for line in guessed)
    assert main(["inspect", str(folder)]) == 0


def test_begin_never_overwrites(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    before = (folder / "campaign.toml").read_bytes()
    assert main(["begin", str(folder)]) == 2
    assert "description-there" in capsys.readouterr().err
    assert (folder / "campaign.toml").read_bytes() == before


def test_begin_needs_something_to_look_at(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "photo.jpg").write_bytes(b"\xff")
    assert main(["begin", str(tmp_path)]) == 2
    assert "no-recordings" in capsys.readouterr().err
    assert not (tmp_path / "campaign.toml").exists()


@pytest.mark.parametrize(
    "source", ["real/soft_capacitive_cell", "real/pneumatic_seals", "hostile/recordings"]
)
def test_begin_copes_with_any_tree(source: str, tmp_path: Path) -> None:
    folder = tmp_path / 'odd "name" {x}'
    shutil.copytree(CAMPAIGNS / source, folder, ignore=shutil.ignore_patterns("campaign.toml"))
    assert main(["begin", str(folder)]) == 0
    assert load_description(folder).title == 'odd "name" {x}'


def test_begin_tells_columns_without_header_by_their_places(tmp_path: Path) -> None:
    for number in (1, 2):
        rows = "".join(f"{i * 10}.0\t{60 + i}\t{100 + i + number}\n" for i in range(9))
        (tmp_path / f"{number}_seal_1bar.txt").write_text(rows)
    assert main(["begin", str(tmp_path)]) == 0
    description = load_description(tmp_path)
    assert description.names == ("{repetition}_{module}_{pressure}",)
    assert [(rule.position, rule.quantity, rule.unit) for rule in description.columns] == [
        (1, "time", "ms"),
        (2, "ignore", None),
        (3, "ignore", None),
    ]
    assert set(description.same) == {"sensor", "kind"}


def test_begin_guesses_kinds_and_units_from_words(tmp_path: Path) -> None:
    for number in (1, 2):
        text = "# kind: cal\n# module: M01\ntime_s,stage_mm,capacitance_pF,amb_C\n"
        text += "".join(f"{i},{60 + i},{100 + i + number},22\n" for i in range(5))
        (tmp_path / f"S{number}.csv").write_text(text)
    assert main(["begin", str(tmp_path)]) == 0
    description = load_description(tmp_path)
    assert description.kinds == {"cal": "staircase"}
    assert [(rule.header, rule.quantity, rule.unit) for rule in description.columns] == [
        ("amb_C", "temperature", "C")
    ]


def test_begin_sees_sensors_side_by_side(tmp_path: Path) -> None:
    for number in (1, 2):
        rows = "".join(f"{i},{60 + i},{100 + i + number},{200 + i},{150 + i}\n" for i in range(5))
        (tmp_path / f"M01_staircase_r{number}.csv").write_text(
            f"time_s,stage_mm,C_AB (pF),C_AC (pF),C_CB (pF)\n{rows}"
        )
    assert main(["begin", str(tmp_path)]) == 0
    description = load_description(tmp_path)
    assert [(rule.header, rule.quantity) for rule in description.columns] == [("C_{sensor} (pF)", "signal")]
    assert description.same == {}


@pytest.mark.parametrize(
    ("headers", "pattern"),
    [
        (["C_AB (pF)", "C_AC (pF)"], "C_{sensor} (pF)"),
        (["C1 pF", "C2 pF"], "{sensor} pF"),
        (["AB_pF", "CB_pF"], "{sensor}_pF"),
        (["C (pF)"], None),
        (["C (pF)", "C (pF)"], None),
        (["C {a} (pF)", "C {b} (pF)"], None),
    ],
)
def test_headers_that_differ_in_one_word_are_one_pattern(headers: list[str], pattern: str | None) -> None:
    assert wide_header(headers) == pattern


@pytest.mark.parametrize(
    ("files", "pattern"),
    [
        (["M01_AB_cal_r1.csv", "M02_CD_cal_r2.csv"], "{module}_{sensor}_{kind}_r{repetition}"),
        (
            ["M01-AB-hold-120mm-1.csv", "M02-CD-hold-60mm-2.csv"],
            "{module}-{sensor}-{kind}-{length}-{repetition}",
        ),
        (
            ["M1_AB_cyc_run01_s1.csv", "M1_AB_cyc_run02_s2.csv"],
            "{module}_{sensor}_{kind}_run{repetition}_s{session}",
        ),
        (["20260301_M1_AB.csv", "20260302_M1_CD.csv"], "{ignore}_{module}_{sensor}"),
    ],
)
def test_names_are_guessed_by_the_look_of_their_parts(files: list[str], pattern: str) -> None:
    guess = guess_pattern(files)
    assert guess is not None
    assert guess.pattern == pattern
    assert guess.matched == guess.names == 2


def test_words_of_kinds_are_guessed() -> None:
    assert kind_of_word("Calibration") == "staircase"
    assert kind_of_word("creep") == "hold"
    assert kind_of_word("zebra") is None


# ---------------------------------------------------------------- report


def test_report_statuses_follow_what_is_set_aside(folder: Path, tmp_path: Path) -> None:
    site = tmp_path / "site"
    assert main(["report", str(folder), "--into", str(site), "--fail-on-set-aside"]) == 0
    assert (site / "index.html").is_file()
    third = folder / "trials" / "M01_AB_staircase_r3.csv"
    third.write_text("")
    assert main(["report", str(folder), "--into", str(site)]) == 0
    assert main(["report", str(folder), "--into", str(site), "--fail-on-set-aside"]) == 1
    third.write_text(TABLE.replace("101", "103"))
    (folder / "trials.csv").write_text("file,use,reason\ntrials/M01_AB_staircase_r3.csv,no,slipped\n")
    assert main(["report", str(folder), "--into", str(site), "--fail-on-set-aside"]) == 0


def test_a_site_inside_the_folder_is_not_counted_as_its_files(folder: Path) -> None:
    for _ in range(2):
        assert main(["report", str(folder), "--into", str(folder / "site")]) == 0
        files = [row["file"] for row in rows_of(folder / "site" / "tables" / "recordings.csv")]
        assert files == ["campaign.toml", "trials/M01_AB_staircase_r1.csv", "trials/M01_AB_staircase_r2.csv"]


def test_report_never_writes_into_a_folder_of_somebody_else(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    other = tmp_path / "thesis"
    other.mkdir()
    (other / "chapter.txt").write_text("words")
    for place in (other, folder):
        assert main(["report", str(folder), "--into", str(place)]) == 2
    assert "Traceback" not in capsys.readouterr().err
    assert [path.name for path in other.iterdir()] == ["chapter.txt"]


def test_a_report_goes_beside_its_folder(folder: Path) -> None:
    assert main(["report", str(folder)]) == 0
    assert (folder.parent / "panels_report" / "index.html").is_file()


def test_what_is_only_counted_stands_where_the_text_says(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for path in sorted((folder / "trials").iterdir()):
        for run in range(3, 6):
            other = path.with_name(path.name.replace("_r1", f"_r{run}").replace("_r2", f"_r{run + 10}"))
            other.write_bytes(path.read_bytes().replace(b"100", b"10%d" % run).replace(b"\n", b"\r\n"))
    assert main(["inspect", str(folder)]) == 0
    assert "more in notices.csv (inspect with --tables DIR writes it)" in capsys.readouterr().out
    assert main(["report", str(folder), "--into", str(tmp_path / "site")]) == 0
    out = capsys.readouterr().out
    assert "more on the Recordings page" in out
    assert "notices.csv" not in out


def test_a_file_for_a_folder_is_one_fault(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["report", str(folder / "campaign.toml")]) == 2
    assert capsys.readouterr().err.startswith("STOPS (1)\n")


def test_each_fault_is_followed_by_its_own_remedy(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    description = folder / "campaign.toml"
    description.write_text(DESCRIPTION + "lisence = 1\nnaem = 2\n")
    assert main(["inspect", str(folder)]) == 2
    said = " ".join(capsys.readouterr().err.split())
    places = [said.index("'lisence'"), said.index("'naem'")]
    remedies = [found.start() for found in re.finditer("to mend:", said)]
    assert places[0] < remedies[0] < places[1] < remedies[1]


# ---------------------------------------------------------------- workers and cache


@pytest.mark.parametrize("number", ["0", "-1", "two", "1.5"])
def test_a_number_of_workers_is_a_whole_number(
    folder: Path, number: str, capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as end:
        main(["report", str(folder), "--workers", number])
    assert end.value.code == 2
    assert "no whole number from 1" in capsys.readouterr().err


def test_a_cluster_where_nobody_answers_stops_with_a_notice(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("campaign.workers.cluster.ANSWER_S", 0.3)
    assert main(["report", str(folder), "--dask", "tcp://127.0.0.1:9"]) == 2
    said = " ".join(capsys.readouterr().err.split())
    assert "no scheduler answers at tcp://127.0.0.1:9" in said
    assert "dask scheduler" in said
    assert not folder.with_name("panels_report").exists()


@pytest.mark.parametrize("address", ["", "nowhere", "http://x y:z", "tcp://"])
def test_an_address_that_is_none_stops_with_a_notice(
    folder: Path, address: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("campaign.workers.cluster.ANSWER_S", 0.3)
    assert main(["report", str(folder), "--dask", address]) == 2
    assert "no scheduler answers" in " ".join(capsys.readouterr().err.split())


def test_without_dask_a_cluster_stops_with_a_notice(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    assert main(["report", str(folder), "--dask", "tcp://127.0.0.1:9"]) == 2
    said = " ".join(capsys.readouterr().err.split())
    assert "'distributed' is not installed" in said
    assert "campaign-report[cluster]" in said


def test_a_cache_that_is_no_cache_is_thrown_away_with_a_line_and_changes_nothing(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("CAMPAIGN_CACHE", str(tmp_path / "cache"))
    sites = [tmp_path / name for name in ("first", "second", "third")]
    assert main(["report", str(folder), "--into", str(sites[0]), "--ignore-cache"]) == 0
    assert not (tmp_path / "cache").exists()
    (tmp_path / "cache").mkdir()
    (tmp_path / "cache" / "results.sqlite").write_text("not a database, " * 300)
    capsys.readouterr()
    assert main(["report", str(folder), "--into", str(sites[1])]) == 0
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert "thrown away, nothing in it is believed" in err
    assert main(["report", str(folder), "--into", str(sites[2]), "--workers", "1"]) == 0
    assert capsys.readouterr().err == ""
    first, second, third = (
        {p.relative_to(site): p.read_bytes() for p in site.rglob("*") if p.is_file()} for site in sites
    )
    assert first == second == third


def test_a_report_of_which_nothing_changed_is_written_without_loading_what_makes_one(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("CAMPAIGN_CACHE", str(tmp_path / "cache"))
    site = tmp_path / "site"
    words = ["report", str(folder), "--into", str(site), "--workers", "1"]
    told = "import sys; from campaign.cli import main; status = main(sys.argv[1:]); "
    told += "print('campaign.pipeline' in sys.modules, 'scipy' in sys.modules); sys.exit(status)"
    runs = [
        subprocess.run([sys.executable, "-c", told, *words], capture_output=True, text=True, check=True)
        for _ in range(2)
    ]
    said = [run.stdout.splitlines() for run in runs]
    assert [lines[-1] for lines in said] == ["True True", "False False"]
    assert said[0][:-1] == said[1][:-1]
