"""Zip files: the same bytes for the same contents, and nothing unpacked that is not a plain file inside."""

from __future__ import annotations

import contextlib
import os
import stat
import struct
import subprocess
import sys
import zipfile
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign import archive
from campaign.archive import (
    campaign_in,
    hash_in_comment_holds,
    names_not_for_windows,
    sha512_of,
    unpack_archive,
    unpack_what_is_whole,
    write_archive,
)
from campaign.notices import NOTICE_CODES, CampaignStops

CONTENTS: dict[str, archive.Content] = {
    "sealed/data/a.csv": b"x,y\n" + b"1,2\n" * 4000,
    "sealed/data/ü ß/名前.csv": b"1\n",
    "sealed/data/empty.txt": b"",
    "sealed/data/picture.png": bytes(range(256)) * 20,
    "sealed/bag-info.txt": b"Bagging-Date: 2025-01-01\nCampaign-Folder: data/ring\n",
}


def written(tmp_path: Path, contents: dict[str, archive.Content] | None = None) -> Path:
    file = tmp_path / "sealed.zip"
    write_archive(CONTENTS if contents is None else contents, file)
    return file


def refusals(file: Path, into: Path) -> str:
    with pytest.raises(CampaignStops) as stops:
        unpack_archive(file, into)
    assert {notice.code for notice in stops.value.notices} <= NOTICE_CODES.keys()
    assert all(notice.weight == "stops" and notice.remedy for notice in stops.value.notices)
    return str(stops.value)


def files_below(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def test_sha512_of_the_standards_example() -> None:
    """FIPS 180-4, published example for the message 'abc' (NIST, SHA512 examples)."""
    assert sha512_of(b"abc") == (
        "ddaf35a193617abacc417349ae20413112e6fa4e89a97ea20a9eeee64b55d39a"
        "2192992a274fc1a836ba3c23a3feebbd454d4423643ce80e2a9ac94fa54ca49f"
    )


def test_what_is_written_comes_out_again(tmp_path: Path) -> None:
    folder = unpack_archive(written(tmp_path), tmp_path / "out")
    assert folder == tmp_path / "out" / "sealed"
    assert files_below(tmp_path / "out") == CONTENTS


def test_bytes_depend_on_contents_alone(tmp_path: Path) -> None:
    """Order of the mapping, clock, umask, file dates, permissions and hash seed leave no trace."""
    first = written(tmp_path).read_bytes()
    source = tmp_path / "elsewhere" / "a.csv"
    source.parent.mkdir()
    source.write_bytes(b"x,y\n" + b"1,2\n" * 4000)
    os.utime(source, (1, 1))
    source.chmod(0o600)
    again = dict(reversed(CONTENTS.items())) | {"sealed/data/a.csv": source}
    before = os.umask(0o077)
    try:
        write_archive(again, tmp_path / "elsewhere" / "other.zip")
    finally:
        os.umask(before)
    assert (tmp_path / "elsewhere" / "other.zip").read_bytes() == first
    program = (
        "from pathlib import Path; from tests_contents import CONTENTS;"
        "from campaign.archive import write_archive; write_archive(CONTENTS, Path('third.zip'))"
    )
    (tmp_path / "tests_contents.py").write_text(f"CONTENTS = {CONTENTS!r}\n", encoding="utf-8")
    path = f"{tmp_path}{os.pathsep}{Path(archive.__file__).parents[1]}"
    environment = {**os.environ, "PYTHONHASHSEED": "77", "TZ": "Asia/Tokyo", "PYTHONPATH": path}
    subprocess.run([sys.executable, "-c", program], cwd=tmp_path, env=environment, check=True)
    assert (tmp_path / "third.zip").read_bytes() == first


def test_members_carry_no_date_and_no_owner(tmp_path: Path) -> None:
    with zipfile.ZipFile(written(tmp_path)) as opened:
        members = opened.infolist()
    assert [m.filename for m in members] == sorted(CONTENTS)
    assert {m.date_time for m in members} == {(1980, 1, 1, 0, 0, 0)}
    assert {m.external_attr >> 16 for m in members} == {stat.S_IFREG | 0o644}
    assert {m.extra for m in members} == {b""}


def test_an_archive_that_was_there_stays_whole_where_writing_fails(tmp_path: Path) -> None:
    file = written(tmp_path)
    before = file.read_bytes()
    with pytest.raises(OSError, match="gone"):
        write_archive({"a/b": b"1", "a/c": tmp_path / "gone"}, file)
    assert file.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["sealed.zip"]


@pytest.mark.parametrize(
    "name", ["../x", "a/../../x", "/x", "C:/x", "a\\b", "a//b", "./a", "a\nb", "", "x" * 5000]
)
def test_names_that_cannot_be_unpacked_everywhere_are_not_written(tmp_path: Path, name: str) -> None:
    with pytest.raises(CampaignStops):
        write_archive({name: b"1"}, tmp_path / "sealed.zip")
    assert list(tmp_path.iterdir()) == []


def test_every_changed_byte_of_the_zip_file_is_noticed(tmp_path: Path) -> None:
    """Also where no content changes: a member's date, the spare bits behind a deflated stream, the hash."""
    file = written(tmp_path, {"s/a.csv": b"1,2\n" * 40, "s/b.txt": b"word"})
    whole = file.read_bytes()
    assert hash_in_comment_holds(file) is True
    for place in range(len(whole)):
        changed = bytearray(whole)
        changed[place] ^= 1
        file.write_bytes(bytes(changed))
        assert hash_in_comment_holds(file) is not True, place
        into = tmp_path / f"out{place}"
        with contextlib.suppress(CampaignStops):
            unpack_what_is_whole(file, into)


def test_a_zip_of_another_program_has_no_hash_of_its_own(tmp_path: Path) -> None:
    file = hostile(tmp_path, ("a/b.txt", b"1"))
    assert hash_in_comment_holds(file) is None
    assert unpack_archive(file, tmp_path / "out") == tmp_path / "out" / "a"


def hostile(tmp_path: Path, *members: tuple[str, bytes], attributes: int = 0) -> Path:
    file = tmp_path / "hostile.zip"
    with zipfile.ZipFile(file, "w") as opened:
        for name, content in members:
            info = zipfile.ZipInfo("placeholder")
            info.filename = info.orig_filename = name
            info.external_attr = attributes
            info.compress_type = zipfile.ZIP_DEFLATED
            opened.writestr(info, content)
    return file


CLIMBS = {
    "../x": "climbs",
    "a/../../x": "climbs",
    "a/./x": "climbs",
    "a//x": "climbs",
    "/etc/x": "absolute",
    "C:/x": "drive letter",
    "c:x": "drive letter",
    "..\\x": "backslash",
    "\\\\host\\share\\x": "backslash",
    "a\tb": "control",
    "../folder/": "climbs",
}


@pytest.mark.parametrize("name", CLIMBS)
def test_names_that_climb_are_refused_before_anything_is_written(tmp_path: Path, name: str) -> None:
    file = hostile(tmp_path, ("s/good.txt", b"1"), (name, b"evil"))
    assert CLIMBS[name] in refusals(file, tmp_path / "deep" / "out")
    assert sorted(p.name for p in tmp_path.rglob("*")) == ["hostile.zip"]


@settings(max_examples=150, deadline=None)
@given(
    st.lists(
        st.sampled_from(["..", ".", "", "a", "C:", "~", " ", "\\", "b\0", "ü", "a."]), min_size=1, max_size=5
    )
)
def test_whatever_the_name_nothing_is_written_outside(
    tmp_path_factory: pytest.TempPathFactory, parts: list[str]
) -> None:
    home = tmp_path_factory.mktemp("home")
    file = hostile(home, ("/".join(parts), b"x"))
    with contextlib.suppress(CampaignStops):
        unpack_archive(file, home / "in" / "out")
    outside = {p for p in home.rglob("*") if not p.is_relative_to(home / "in" / "out")}
    assert outside <= {file, home / "in"}


@pytest.mark.parametrize(
    ("kind", "words"),
    [(stat.S_IFLNK, "is a link"), (stat.S_IFIFO, "no ordinary"), (stat.S_IFCHR, "no ordinary")],
)
def test_links_and_devices_are_refused(tmp_path: Path, kind: int, words: str) -> None:
    file = hostile(tmp_path, ("s/door", b"/etc"), ("s/door/x", b"evil"), attributes=(kind | 0o777) << 16)
    assert words in refusals(file, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_one_name_twice_is_refused(tmp_path: Path) -> None:
    with pytest.warns(UserWarning, match="Duplicate"):
        file = hostile(tmp_path, ("s/a", b"1"), ("s/a", b"2"))
    assert "stands 2 times" in refusals(file, tmp_path / "out")


def test_a_file_that_is_also_a_folder_is_refused(tmp_path: Path) -> None:
    assert "a file and a folder" in refusals(
        hostile(tmp_path, ("s/a", b"1"), ("s/a/b", b"2")), tmp_path / "out"
    )


def test_a_member_that_shrinks_too_well_is_refused(tmp_path: Path) -> None:
    file = hostile(tmp_path, ("s/zeros", bytes(archive.SMALL_BYTES + 1)))
    assert "200 times" in refusals(file, tmp_path / "out")


def test_many_zeros_of_our_own_are_stored_so_that_they_can_be_unpacked(tmp_path: Path) -> None:
    zeros = bytes(archive.SMALL_BYTES + 1)
    folder = unpack_archive(written(tmp_path, {"s/zeros": zeros}), tmp_path / "out")
    assert (folder / "zeros").read_bytes() == zeros


@pytest.mark.parametrize(
    ("limit", "value", "words"), [("MOST_BYTES", 3, "would unpack"), ("MOST_MEMBERS", 1, "holds 2")]
)
def test_archives_beyond_the_stated_limits_are_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, limit: str, value: int, words: str
) -> None:
    file = hostile(tmp_path, ("s/a", b"12"), ("s/b", b"34"))
    monkeypatch.setattr(archive, limit, value)
    assert words in refusals(file, tmp_path / "out")


def test_a_size_that_lies_is_found_while_reading(tmp_path: Path) -> None:
    """The list says two bytes, the stream holds a million: no more than said is ever written."""
    file = hostile(tmp_path, ("s/a", bytes(1_000_000)))
    data = bytearray(file.read_bytes())
    entry = data.index(b"PK\x01\x02")
    data[entry + 24 : entry + 28] = struct.pack("<I", 2)
    file.write_bytes(bytes(data))
    assert "damaged" in refusals(file, tmp_path / "out")


def test_encrypted_members_are_refused(tmp_path: Path) -> None:
    file = hostile(tmp_path, ("s/a", b"1"))
    data = bytearray(file.read_bytes())
    data[data.index(b"PK\x01\x02") + 8] |= 1
    file.write_bytes(bytes(data))
    assert "is encrypted" in refusals(file, tmp_path / "out")


def test_other_ways_of_compressing_are_refused(tmp_path: Path) -> None:
    file = tmp_path / "other.zip"
    with zipfile.ZipFile(file, "w", zipfile.ZIP_LZMA) as opened:
        opened.writestr("s/a", b"1" * 100)
    assert "method 14" in refusals(file, tmp_path / "out")


SPOILT: dict[str, Callable[[bytes], bytes]] = {
    "empty": lambda whole: b"",
    "no zip file": lambda whole: b"time_s,length\n" * 200,
    "cut short": lambda whole: whole[: len(whole) // 2],
    "its end cut": lambda whole: whole[:-200],
    "its list cut out": lambda whole: (
        whole[: whole.index(b"PK\x01\x02")] + whole[whole.index(b"PK\x05\x06") :]
    ),
}


@pytest.mark.parametrize("how", SPOILT)
def test_what_is_no_whole_zip_file_is_said_to_be_none(tmp_path: Path, how: str) -> None:
    file = written(tmp_path)
    file.write_bytes(SPOILT[how](file.read_bytes()))
    assert "cannot be read as a zip file" in refusals(file, tmp_path / "out")


def test_a_damaged_member_is_named_and_nothing_is_left(tmp_path: Path) -> None:
    file = written(tmp_path)
    data = bytearray(file.read_bytes())
    place = data.index(bytes(range(256)))
    data[place] ^= 1
    file.write_bytes(bytes(data))
    assert "'sealed/data/picture.png' are damaged" in refusals(file, tmp_path / "out")
    assert not any((tmp_path / "out").iterdir())
    kept = unpack_what_is_whole(file, tmp_path / "kept")
    assert [notice.file for notice in kept.damaged] == ["sealed/data/picture.png"]
    assert (kept.folder / "data" / "a.csv").read_bytes() == CONTENTS["sealed/data/a.csv"]


def test_a_folder_with_something_in_it_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "mine.txt").write_text("mine")
    assert "not empty" in refusals(written(tmp_path), tmp_path / "out")
    assert files_below(tmp_path / "out") == {"mine.txt": b"mine"}


def test_the_campaign_in_an_archive_is_where_its_label_says(tmp_path: Path) -> None:
    folder = unpack_archive(written(tmp_path), tmp_path / "out")
    assert campaign_in(folder) == folder / "data" / "ring"
    assert campaign_in(tmp_path) == tmp_path


@pytest.mark.parametrize("place", ["../../etc", "/etc", "C:/x"])
def test_a_label_that_leads_elsewhere_is_refused(tmp_path: Path, place: str) -> None:
    (tmp_path / "bag-info.txt").write_text(f"Campaign-Folder: {place}\n", encoding="utf-8")
    with pytest.raises(CampaignStops, match="no place inside"):
        campaign_in(tmp_path)


@pytest.mark.parametrize(
    ("name", "why"),
    [
        ("trials/12:30.csv", "holds :"),
        ('a<b>|"*?.txt', 'holds " * < > ? |'),
        ("notes/ends in a stop.", "ends in a full stop"),
        ("a folder /x.csv", "ends in a full stop or a space"),
        ("CON/x.csv", "kept for a device"),
        ("trials/nul.csv", "kept for a device"),
        ("com1.tar.gz", "kept for a device"),
    ],
)
def test_names_that_windows_cannot_unpack_are_told(name: str, why: str) -> None:
    (told,) = names_not_for_windows(["trials/fine.csv", "contents.csv", "comet.txt", "名前 ü.bin", name])
    assert (told.code, told.weight, told.file) == ("name-not-for-windows", "noted", name)
    assert why in told.what


def test_names_that_differ_in_capitals_alone_are_told() -> None:
    told = names_not_for_windows(["A.csv", "a.csv", "b.csv"])
    assert [n.file for n in told] == ["A.csv", "a.csv"]
