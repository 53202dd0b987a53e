"""Verifying: whatever is not as it was sealed is named, and figures are computed again."""

from __future__ import annotations

import json
import re
import shutil
import zipfile
from collections.abc import Callable
from pathlib import Path

import pytest

from campaign import archiving
from campaign.archive import CAMPAIGN_LABEL, campaign_in, unpack_archive, write_archive
from campaign.cli import main
from campaign.notices import CampaignStops
from campaign.provenance import verifying
from campaign.provenance.bag import bag_files, read_info
from campaign.provenance.manifest import with_manifests
from campaign.provenance.verifying import verification_lines, verify_folder

Copy = Callable[[], Path]

MEMBERS = [
    "bagit.txt",
    "bag-info.txt",
    "manifest-sha512.txt",
    "tagmanifest-sha512.txt",
    "README.txt",
    "data/ro-crate-metadata.json",
    "data/CITATION.cff",
    "data/MODEL.md",
    "data/tables/readings.csv",
    "data/ro-crate-preview_files/index.html",
    "data/campaigns/up/this_campaign/trials/run_000.csv",
    "data/campaigns/up/this_campaign/photos/名前 ü.bin",
    "data/campaigns/older/campaign.toml",
]
"""Several kinds of members: tag files, metadata, tables, pages, recordings, earlier campaigns."""


def named(folder: Path) -> dict[str, str]:
    return {fault.file: fault.wrong for fault in verify_folder(folder).faults}


def flip(file: Path, place: int) -> None:
    content = bytearray(file.read_bytes())
    content[place] ^= 1
    file.write_bytes(bytes(content))


def seal_again(folder: Path, into: Path) -> Path:
    """Pack a spoilt archive anew with hashes that fit: what somebody would do who wants figures believed."""
    info = read_info((folder / "bag-info.txt").read_text("utf-8"))
    payload = {
        path.relative_to(folder / "data").as_posix(): path.read_bytes()
        for path in sorted((folder / "data").rglob("*"))
        if path.is_file()
    }
    beside = {"README.txt": (folder / "README.txt").read_bytes()}
    files = bag_files(payload, {k: v for k, v in info.items() if k != "Payload-Oxum"}, beside)
    write_archive({f"again/{name}": content for name, content in files.items()}, into)
    return into


def said(capsys: pytest.CaptureFixture[str]) -> str:
    return " ".join(capsys.readouterr().out.split())


def test_what_is_as_sealed_is_said_to_be(
    sealed: Path, unpacked: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for target in (sealed, unpacked, unpacked.parent, unpacked / "data"):
        assert main(["verify", str(target)]) == 0
        words = said(capsys)
        assert "hashes and structure: nothing differs" in words
        assert "They do not show when or by whom: deposit the archive where a date is kept." in words


@pytest.mark.parametrize("member", MEMBERS)
def test_a_changed_byte_is_named_in_the_folder(copy_of_archive: Copy, member: str) -> None:
    folder = copy_of_archive()
    flip(folder / member, (folder / member).stat().st_size // 2)
    faults = named(folder)
    assert member in " ".join([*faults, *faults.values()])
    hashed_by = {"manifest-sha512.txt", "tagmanifest-sha512.txt"}
    twins = {
        member.replace("data/", "data/ro-crate-preview_files/"),
        member.replace("ro-crate-preview_files/", ""),
    }
    if member not in hashed_by:
        assert member in faults
        assert set(faults) <= {member, *twins, *hashed_by}


@pytest.mark.parametrize("member", [name for name in MEMBERS if name not in ("bagit.txt", "README.txt")])
def test_a_changed_byte_is_named_in_the_zip_file(
    sealed: Path, tmp_path: Path, member: str, capsys: pytest.CaptureFixture[str]
) -> None:
    spoilt = tmp_path / "spoilt.zip"
    shutil.copy(sealed, spoilt)
    with zipfile.ZipFile(spoilt) as archive:
        info = next(i for i in archive.infolist() if i.filename.partition("/")[2] == member)
    head = spoilt.read_bytes()[info.header_offset : info.header_offset + 30]
    begin = (
        info.header_offset
        + 30
        + int.from_bytes(head[26:28], "little")
        + int.from_bytes(head[28:30], "little")
    )
    flip(spoilt, begin + info.compress_size // 2)
    assert main(["verify", str(spoilt)]) == 1
    words = said(capsys)
    assert f" {member} " in words
    assert "spoilt.zip is not, byte by byte, the zip file that was sealed" in words


def test_a_byte_of_the_zip_file_around_the_contents_is_noticed(
    sealed: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The date of a member in the list at the end: no content changes."""
    spoilt = tmp_path / "spoilt.zip"
    shutil.copy(sealed, spoilt)
    flip(spoilt, spoilt.read_bytes().rindex(b"PK\x01\x02") + 12)
    assert main(["verify", str(spoilt)]) == 1
    assert "1 thing is not as sealed spoilt.zip is not, byte by byte" in said(capsys)


def test_an_archive_packed_by_another_program_is_judged_by_its_contents(
    unpacked: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = shutil.make_archive(str(tmp_path / "theirs"), "zip", unpacked.parent)
    assert main(["verify", file]) == 0
    assert "another program packed this zip file" in said(capsys)


def test_missing_extra_and_linked_files_are_named(copy_of_archive: Copy) -> None:
    folder = copy_of_archive()
    (folder / "data" / "MODEL.md").unlink()
    (folder / "data" / "tables" / "more.csv").write_bytes(b"1")
    (folder / "note.txt").write_bytes(b"1")
    (folder / "data" / "door").symlink_to("/etc/hostname")
    (folder / "data" / "way").symlink_to("/etc")
    faults = named(folder)
    assert faults["data/MODEL.md"] == "is missing"
    assert "extra file" in faults["data/tables/more.csv"]
    assert "extra file" in faults["note.txt"]
    assert "is a link" in faults["data/door"]
    assert "is a link" in faults["data/way"]
    assert "found" in faults["bag-info.txt"]
    assert "describes 'MODEL.md', which is not there" in faults["data/ro-crate-metadata.json"]


def test_an_emptied_archive_is_no_crash(tmp_path: Path) -> None:
    (tmp_path / "bagit.txt").write_text("BagIt-Version: 0.97\n", encoding="utf-8")
    (tmp_path / "manifest-sha512.txt").write_text("no manifest at all\x00\n", encoding="utf-8")
    faults = named(tmp_path)
    assert set(faults) >= {"bagit.txt", "manifest-sha512.txt", "tagmanifest-sha512.txt"}


@pytest.mark.parametrize("crate", [b"", b"[]", b"{}", b'{"@graph": [1]}', b'{"@graph": [{"@id": "./"}]}'])
def test_a_crate_that_is_none_is_said_to_be_none(copy_of_archive: Copy, crate: bytes) -> None:
    folder = copy_of_archive()
    (folder / "data" / "ro-crate-metadata.json").write_bytes(crate)
    lines = [f.wrong for f in verify_folder(folder).faults if f.file == "data/ro-crate-metadata.json"]
    assert any("no RO-Crate" in line for line in lines)


def test_a_site_alone_is_verified_by_its_own_list(tmp_path: Path) -> None:
    for address, content in with_manifests({"index.html": b"<p>", "tables/a.csv": b"1"}, {}).items():
        (tmp_path / address).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / address).write_bytes(content)
    (tmp_path / "campaign-site.txt").write_text("ours", encoding="utf-8")
    assert named(tmp_path) == {}
    (tmp_path / "index.html").write_bytes(b"<p>changed")
    (tmp_path / "tables" / "a.csv").unlink()
    (tmp_path / "more.html").write_bytes(b"")
    assert {k: v.split()[0] for k, v in named(tmp_path).items()} == {
        "index.html": "differs",
        "tables/a.csv": "is",
        "more.html": "is",
    }


def test_a_site_holds_nothing_to_recompute(
    unpacked: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    site = unpacked / "data" / "ro-crate-preview_files"
    assert main(["verify", str(site)]) == 0
    assert main(["verify", str(site), "--recompute"]) == 2
    assert "a site holds no recordings" in " ".join(capsys.readouterr().err.split())
    (tmp_path / "holiday.txt").write_text("1")
    assert main(["verify", str(tmp_path)]) == 2
    assert main(["verify", str(tmp_path / "nowhere.zip")]) == 2
    assert main(["verify", str(tmp_path / "holiday.txt")]) == 2


def test_hostile_archives_are_refused_by_the_command(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "climbs.zip"
    with zipfile.ZipFile(file, "w") as archive:
        archive.writestr("../../evil.txt", "evil")
    assert main(["verify", str(file)]) == 2
    assert "climbs out of the folder" in " ".join(capsys.readouterr().err.split())
    assert [p.name for p in tmp_path.iterdir()] == ["climbs.zip"]


def test_everything_is_computed_again_and_agrees(sealed: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["verify", str(sealed), "--recompute"]) == 0
    words = said(capsys)
    tables, figures, same = map(
        int, re.findall(r"(\d+) tables, (\d+) figures; (\d+) tables are the same", words)[0]
    )
    assert tables == same > 20
    assert figures > 5000
    assert "every figure agrees within its tolerance" in words
    assert "1e-06 of the figure" in words
    assert "first: fitted again from readings.csv" in words
    assert "log-likelihood at our estimate is the same" in words


def test_an_altered_recording_gives_other_figures_though_all_hashes_fit(
    copy_of_archive: Copy, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """One signal of one recording, a thousandth larger; sealed anew with hashes that fit."""
    folder = copy_of_archive()
    recording = campaign_in(folder) / "trials" / "run_002.csv"
    lines = recording.read_text("utf-8").splitlines()
    length, signal = lines[3].split(",")
    lines[3] = f"{length},{float(signal) * 1.001:.5f}"
    recording.write_text("\n".join(lines) + "\n", encoding="utf-8")
    forged = seal_again(folder, tmp_path / "forged.zip")
    assert main(["verify", str(forged)]) == 0
    capsys.readouterr()
    assert main(["verify", str(forged), "--recompute"]) == 1
    words = said(capsys)
    assert "tables/readings.csv, row 21 (first, M1, BC, trials/run_002.csv), signal: sealed" in words
    assert "allowed 1e-09 of the figure" in words
    assert "tables/recordings.csv" in words


def test_an_altered_figure_is_named_with_its_row_and_by_how_much(
    copy_of_archive: Copy, unpacked: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """The reading again is the other tests'; here it gives what was sealed, and the sealed table lies."""
    site = unpacked / "data" / "ro-crate-preview_files"
    files = {p.relative_to(site).as_posix(): p.read_bytes() for p in site.rglob("*") if p.is_file()}
    monkeypatch.setattr(archiving, "make_site", lambda *_: (None, files))
    folder = copy_of_archive()
    for place in (folder / "data", folder / "data" / "ro-crate-preview_files"):
        table = place / "tables" / "sensor_lines.csv"
        rows = table.read_text("utf-8").splitlines()
        cells = rows[2].split(",")
        column = rows[0].split(",").index("slope")
        cells[column] = repr(float(cells[column]) * 1.01)
        table.write_text("\n".join([*rows[:2], ",".join(cells), *rows[3:]]) + "\n", encoding="utf-8")
    forged = seal_again(folder, folder.parent / "forged.zip")
    assert main(["verify", str(forged), "--recompute"]) == 1
    words = said(capsys)
    assert "hashes and structure: nothing differs" in words
    assert "1 figure lies apart: tables/sensor_lines.csv, row 2 (first, M1, AB," in words
    assert f", slope: sealed {cells[column]}, now " in words
    assert "(-0.0099 of it); allowed 1e-06 of the figure" in words


def test_another_version_of_the_program_or_its_packages_is_said(
    copy_of_archive: Copy, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = copy_of_archive()
    versions = folder / "data" / "software" / "versions.json"
    said = json.loads(versions.read_bytes())
    now = said["packages"]["numpy"]
    said["packages"]["numpy"] = "1.0\x1b[2J"
    versions.write_text(json.dumps(said), encoding="utf-8")
    monkeypatch.setattr(verifying, "__version__", "99.0")
    lines = verification_lines(verify_folder(folder), "panels.zip")
    assert any("sealed by version 0" in line and "looked at by version 99.0" in line for line in lines)
    assert any(f"numpy 1.0\\x1b[2J (here {now})" in line for line in lines)


def test_an_archive_whose_label_leads_out_is_not_computed(copy_of_archive: Copy) -> None:
    folder = copy_of_archive()
    info = (folder / "bag-info.txt").read_text("utf-8")
    changed = re.sub(rf"{CAMPAIGN_LABEL}: .*", f"{CAMPAIGN_LABEL}: ../../..", info)
    (folder / "bag-info.txt").write_text(changed, encoding="utf-8")
    found = verify_folder(folder)
    assert "bag-info.txt" in {fault.file for fault in found.faults}
    with pytest.raises(CampaignStops, match="no place inside"):
        archiving.recompute_archive(found)


def test_many_faults_are_counted_and_the_first_are_shown(copy_of_archive: Copy) -> None:
    folder = copy_of_archive()
    for file in (folder / "data" / "ro-crate-preview_files").rglob("*.html"):
        file.write_bytes(b"")
    for file in (folder / "data" / "software" / "source").rglob("*.py"):
        file.write_bytes(b"")
    found = verify_folder(folder)
    lines = verification_lines(found, "x")
    assert len(found.faults) > verifying.MOST_SHOWN
    assert f"{len(found.faults)} things are not as sealed" in lines[1]
    assert lines[-1] == f"  and {len(found.faults) - verifying.MOST_SHOWN} more"


def test_versions_that_cannot_be_read_are_none(tmp_path: Path, unpacked: Path) -> None:
    assert verifying.sealed_versions(tmp_path) == {}
    written = json.loads((unpacked / "data" / "software" / "versions.json").read_bytes())["packages"]
    assert verifying.sealed_versions(unpacked) == written


def test_unpacking_gives_what_verify_looks_at(sealed: Path, tmp_path: Path) -> None:
    assert verify_folder(unpack_archive(sealed, tmp_path / "here")).faults == ()
