"""Earlier campaigns joined for comparison: read, reconciled, or said to be missing; the report goes on."""

from __future__ import annotations

import json
import shutil
import zipfile
from dataclasses import replace
from pathlib import Path

import pytest

from campaign.analyses.earlier import Joined, unique_labels
from campaign.campaign_reading import read_campaign
from campaign.cli import main
from campaign.earlier_campaigns import read_earlier
from campaign.pages.generations import comparison_figures
from campaign.pages.site import build_site
from campaign.pipeline import analyse, report
from tests.pages.small_campaign import Sketch, write_campaign

OLD = Sketch(generations=("first",), modules=3, sensors=("AB", "BC"), sessions=1, limits="")
NEW = Sketch(generations=("second",), modules=3, sensors=("AB", "BC"), sessions=1, limits="")
TINY = Sketch(generations=("second",), modules=1, sensors=("AB",), sessions=1, runs=2, limits="")

FEW = Sketch(generations=("second",), modules=2, sensors=("AB", "BC"), sessions=1, runs=2, limits="")


def named(folder: Path, *earlier: str, key: str = "folder") -> Path:
    """Add ``[[earlier]]`` tables to the description of *folder*."""
    description = folder / "campaign.toml"
    text = description.read_text(encoding="utf-8")
    text += "".join(f'\n[[earlier]]\n{key} = "{one}"\n' for one in earlier)
    description.write_text(text, encoding="utf-8")
    return folder


def retitled(folder: Path, title: str) -> Path:
    description = folder / "campaign.toml"
    text = description.read_text(encoding="utf-8").replace("Small invented panels", title)
    description.write_text(text, encoding="utf-8")
    return folder


def earlier_of(folder: Path) -> Joined:
    return read_earlier(folder, read_campaign(folder))


def joined(folder: Path):
    read = read_campaign(folder)
    return analyse(read, None, read_earlier(folder, read))


@pytest.fixture(scope="module")
def old(tmp_path_factory) -> Path:
    return retitled(write_campaign(tmp_path_factory.mktemp("old") / "old", OLD, seed=3), "Older panels")


@pytest.fixture
def new(tmp_path: Path) -> Path:
    return write_campaign(tmp_path / "new", NEW)


@pytest.fixture
def tiny(tmp_path: Path) -> Path:
    return write_campaign(tmp_path / "tiny", TINY)


@pytest.fixture(scope="module")
def both(old, tmp_path_factory):
    """The results of a campaign with an earlier one."""
    return joined(named(write_campaign(tmp_path_factory.mktemp("both") / "new", NEW), str(old)))


def test_an_earlier_folder_joins_the_comparison_as_the_older_side(both):
    assert [c.title for c in both.earlier] == ["Older panels"]
    assert both.generations is not None
    assert both.generations.names == ("first", "second")
    assert both.generations.sources == {"first": "Older panels", "second": "Small invented panels"}
    assert {"linearity", "slope", "zero_signal"} <= set(both.generations.table["figure"])
    one = both.earlier[0]
    assert (one.recordings, one.modules, one.sensors) == (12, 3, 6)
    assert len(one.hashes["trials/run_000.csv"]) == 64
    assert {c.what for c in both.generations.confounded} >= {"campaign"}
    # budgets of earlier campaigns are not made, and the layouts' node errors are not read
    said = {n.code for n in both.notices if n.code.startswith("earlier-")}
    assert said <= {"earlier-differs"}


def test_a_generation_of_the_same_name_carries_its_campaigns_title(tmp_path, old):
    earlier = earlier_of(
        named(write_campaign(tmp_path / "again", replace(TINY, generations=("first",))), str(old))
    )
    assert earlier.campaigns[0].order == ("first (Older panels)",)
    assert earlier.campaigns[0].offers.generations == ("first (Older panels)",)
    assert [n.code for n in earlier.notices] == ["earlier-renamed"]


def test_labels_are_unique_however_often_a_name_and_a_title_occur():
    labels = unique_labels(["a"], [("T", ["a", "b"]), ("T", ["a"]), ("U", ["c"])])
    assert labels == [{"a": "a (T)", "b": "b"}, {"a": "a (T, 2)"}, {"c": "c"}]


def test_signals_in_other_units_of_one_family_are_the_same_signals(tmp_path, old, tiny):
    folder = tmp_path / "nanofarads"
    write_campaign(folder, OLD, seed=3)
    text = (folder / "campaign.toml").read_text(encoding="utf-8").replace('unit = "pF"', 'unit = "nF"')
    (folder / "campaign.toml").write_text(text, encoding="utf-8")
    for path in (folder / "trials").glob("*.csv"):
        head, *rows = path.read_text(encoding="utf-8").splitlines()
        made = [f"{x},{float(c) / 1000:.9f}" for x, c in (row.split(",") for row in rows)]
        path.write_text("\n".join([head, *made]) + "\n", encoding="utf-8")
    names = [str(old), str(folder)]
    values = [one.offers.values.set_index("figure") for one in earlier_of(named(tiny, *names)).campaigns]
    for figure in ("slope", "zero_signal", "linearity"):
        here, there = (table.loc[figure] for table in values)
        assert set(here["unit"]) == set(there["unit"])
        assert here["value"].to_numpy() == pytest.approx(there["value"].to_numpy(), rel=1e-4)


def test_signals_of_another_kind_are_a_mismatch_and_the_rest_is_compared(tmp_path, new):
    folder = write_campaign(tmp_path / "ohms", OLD, seed=3)
    text = (folder / "campaign.toml").read_text(encoding="utf-8").replace('unit = "pF"', 'unit = "ohm"')
    (folder / "campaign.toml").write_text(text, encoding="utf-8")
    results = joined(named(new, str(folder)))
    made = results.generations
    assert made is not None
    assert {f for f, *_ in made.not_compared} == {"slope", "zero_signal"}
    assert {"linearity", "gauge_factor"} <= set(made.table["figure"])
    assert any(n.code == "earlier-differs" and "units differ" in n.what for n in results.notices)


def test_a_shorter_range_is_compared_over_what_both_reach(tmp_path, new):
    folder = write_campaign(tmp_path / "short", OLD, seed=3)
    for path in (folder / "trials").glob("*.csv"):
        head, *rows = path.read_text(encoding="utf-8").splitlines()
        made = [row for row in rows if float(row.split(",")[0]) < 79.0]  # 60 mm at rest: up to 30 %
        path.write_text("\n".join([head, *made]) + "\n", encoding="utf-8")
    results = joined(named(new, str(folder)))
    made = results.generations
    assert made is not None
    assert {"linearity", "repeatability", "slope"} <= set(made.table["figure"])
    assert {f for f, *_ in made.not_compared} == {"strain_error", "staircase_hysteresis"}
    assert results.earlier[0].upper == pytest.approx(0.3)
    assert results.earlier[0].full_scale == pytest.approx(0.3)
    assert results.earlier[0].restricted is not None
    # the eye is not given to compare what the table does not
    drawn = {figure.name: figure for figure in comparison_figures(made, results.earlier)}["modules"].data
    assert set(drawn.loc[drawn["generation"] == "first", "figure"]) == {
        "slope",
        "gauge_factor",
        "zero_signal",
    }
    assert {"linearity", "strain_error"} <= set(made.modules["figure"])
    # this campaign's own figures stay those of its whole range
    assert results.calibration is not None
    assert results.calibration.sensor_lines["strain_high"].max() == pytest.approx(0.4)


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (lambda folder: folder / "nowhere", "is no folder"),
        (lambda folder: folder.mkdir() or folder, "no campaign.toml"),
        (lambda folder: _without_recordings(folder), "recording"),
    ],
)
def test_a_campaign_that_cannot_be_read_is_a_notice(tmp_path, tiny, spoil, said):
    earlier = earlier_of(named(tiny, str(spoil(tmp_path / "broken"))))
    assert [(n.code, n.weight) for n in earlier.notices] == [("earlier-not-joined", "set aside")]
    assert said in earlier.notices[0].what
    assert earlier.notices[0].remedy
    assert earlier.notices[0].what.count(str(tmp_path)) <= 2  # as the description names it, no more
    assert earlier.campaigns == ()


def _without_recordings(folder: Path) -> Path:
    write_campaign(folder, TINY)
    for path in (folder / "trials").glob("*.csv"):
        path.unlink()
    return folder


def test_a_campaign_never_joins_itself_or_another_twice(old, tiny):
    earlier = earlier_of(named(tiny, ".", str(old), f"{old}/."))
    assert [n.what for n in earlier.notices] == [
        ". is this campaign, or is named twice",
        f"{old}/. is this campaign, or is named twice",
    ]
    assert len(earlier.campaigns) == 1


@pytest.fixture(scope="module")
def sealed(old, tmp_path_factory) -> Path:
    file = tmp_path_factory.mktemp("sealed") / "older.zip"
    assert main(["seal", str(old), "--into", str(file)]) == 0
    return file


def tables_of(site: Path) -> dict[str, bytes]:
    named_otherwise = ("schema.json", "earlier_campaigns.csv", "earlier_files.csv", "files.csv")
    return {p.name: p.read_bytes() for p in (site / "tables").iterdir() if p.name not in named_otherwise}


def test_a_sealed_archive_joins_as_the_folder_does_and_is_sealed_in_its_turn(tmp_path, old, sealed, capsys):
    for name, place, key in (("one", "old", "folder"), ("two", "older.zip", "archive")):
        folder = named(write_campaign(tmp_path / name / "new", FEW), f"../{place}", key=key)
        shutil.copytree(old, folder.parent / "old") if key == "folder" else shutil.copy(sealed, folder.parent)
        assert report(folder, tmp_path / name / "site", fail_on_set_aside=True) == 0
    by_folder, by_archive = tmp_path / "one" / "site", tmp_path / "two" / "site"
    made, again = tables_of(by_folder), tables_of(by_archive)
    # the description is another file by its name of the earlier campaign; what it leads to is the same
    own = ("recordings.csv",)
    assert {name for name in made if made[name] != again[name]} <= set(own)
    assert "Older panels" in made["generations.csv"].decode() or b"first" in made["generations.csv"]
    hashes = [(site / "tables" / "earlier_files.csv").read_text("utf-8") for site in (by_folder, by_archive)]
    assert hashes[0].replace("../old", "../older.zip") == hashes[1]
    words = (by_archive / "generations.html").read_text("utf-8") + (by_archive / "provenance.html").read_text(
        "utf-8"
    )
    assert "../older.zip" in words
    assert "campaign-earlier-" not in words

    archive = tmp_path / "newer.zip"
    assert main(["seal", str(tmp_path / "two" / "new"), "--into", str(archive)]) == 0
    with zipfile.ZipFile(archive) as whole:
        (inside,) = (name for name in whole.namelist() if name.endswith("/campaigns/older.zip"))
        assert whole.read(inside) == sealed.read_bytes()
    capsys.readouterr()
    assert main(["verify", str(archive), "--recompute"]) == 0
    assert "every figure agrees within its tolerance" in " ".join(capsys.readouterr().out.split())


def repacked(file: Path, into: Path, name: str, content: bytes) -> Path:
    """Write the members of a zip file anew, sound as a zip file, with other bytes under the end of a name."""
    with zipfile.ZipFile(file) as was, zipfile.ZipFile(into, "w") as now:
        for member in was.namelist():
            now.writestr(member, content if member.endswith(name) else was.read(member))
    return into


def damaged(file: Path, into: Path) -> Path:
    content = bytearray(file.read_bytes())
    content[len(content) // 2] ^= 1
    into.write_bytes(content)
    return into


def climbing(into: Path) -> Path:
    with zipfile.ZipFile(into, "w") as archive:
        archive.writestr("../evil.txt", "evil")
    return into


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (lambda file, into: damaged(file, into), "damaged"),
        (
            lambda file, into: repacked(file, into, "trials/run_000.csv", b"length [mm]\n1\n"),
            "not as it was sealed",
        ),
        (lambda file, into: climbing(into), "climbs out of the folder"),
        (lambda file, into: into.write_bytes(b"no zip file"), "zip"),
        (lambda file, into: None, "No such file"),
    ],
)
def test_an_archive_that_is_damaged_hostile_or_gone_is_a_notice(tmp_path, new, sealed, spoil, said):
    spoil(sealed, tmp_path / "broken.zip")
    earlier = read_earlier(named(new, "../broken.zip", key="archive"), read_campaign(new))
    assert [(n.code, n.weight) for n in earlier.notices] == [("earlier-not-joined", "set aside")]
    assert said in earlier.notices[0].what
    assert "broken.zip" in earlier.notices[0].what
    assert str(tmp_path) not in earlier.notices[0].what
    assert "campaign-earlier-" not in earlier.notices[0].what
    assert not (tmp_path / "evil.txt").exists()


def test_an_archive_is_joined_once_however_often_it_is_named(new, sealed):
    folder = named(new, str(sealed), f"{sealed.parent}/./{sealed.name}", key="archive")
    earlier = read_earlier(folder, read_campaign(folder))
    assert [n.what.endswith("is named twice") for n in earlier.notices] == [True]
    assert len(earlier.campaigns) == 1


def test_campaigns_that_name_each_other_are_followed_one_step_only(tmp_path, tiny):
    folder = named(write_campaign(tmp_path / "mutual", replace(TINY, generations=("first",))), str(tiny))
    earlier = earlier_of(named(tiny, str(folder)))
    assert [n.code for n in earlier.notices] == ["earlier-not-followed"]
    assert len(earlier.campaigns) == 1


def test_the_site_shows_what_was_joined_with_its_hashes(both, old):
    files = build_site(both)
    assert "Older panels" in files["generations.html"].decode("utf-8")
    listed = files["tables/earlier_files.csv"].decode("utf-8")
    assert listed.count("\n") == 1 + len(list(old.rglob("*.csv"))) + 1
    assert "earlier_files" in files["provenance.html"].decode("utf-8")
    names = {r["name"] for r in json.loads(files["tables/schema.json"])["resources"]}
    assert {"generations", "planning", "earlier_campaigns", "earlier_files"} <= names


def test_a_missing_earlier_campaign_counts_as_set_aside_the_report_goes_on_and_shows_no_path_of_the_machine(
    tmp_path, tiny
):
    assert report(named(tiny, "../nowhere"), tmp_path / "site", fail_on_set_aside=True) == 1
    notices = (tmp_path / "site" / "tables" / "notices.csv").read_text(encoding="utf-8")
    assert "../nowhere" in notices
    assert str(tmp_path) not in notices
    assert (tmp_path / "site" / "calibration.html").is_file()
