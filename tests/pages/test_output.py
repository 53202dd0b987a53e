"""Writing the output folder: whole or not at all, and never over what is not ours."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from campaign.notices import CampaignStops
from campaign.pages.output import MARKER, check_ours, write_folder

FILES = {"index.html": b"first", "data/index.js": b"1", "tables/a.csv": b"x\n"}


def content_of(folder: Path) -> dict[str, bytes]:
    files = sorted(path for path in folder.rglob("*") if path.is_file())
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in files}


def test_a_new_folder_holds_the_files_and_the_marker(tmp_path: Path) -> None:
    write_folder(FILES, tmp_path / "deep" / "site")
    content = content_of(tmp_path / "deep" / "site")
    assert content.keys() == {*FILES, MARKER}
    assert content["data/index.js"] == b"1"
    assert list((tmp_path / "deep").iterdir()) == [tmp_path / "deep" / "site"]


def test_an_old_site_is_replaced_as_a_whole(tmp_path: Path) -> None:
    write_folder({**FILES, "old.html": b"old"}, tmp_path / "site")
    write_folder(FILES, tmp_path / "site")
    assert content_of(tmp_path / "site").keys() == {*FILES, MARKER}


def test_an_empty_folder_is_taken(tmp_path: Path) -> None:
    (tmp_path / "site").mkdir()
    write_folder(FILES, tmp_path / "site")
    assert (tmp_path / "site" / "index.html").is_file()


def test_a_folder_with_anything_else_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "thesis.txt").write_text("years of work", encoding="utf-8")
    with pytest.raises(CampaignStops) as stopped:
        write_folder(FILES, tmp_path)
    assert content_of(tmp_path) == {"thesis.txt": b"years of work"}
    notice = stopped.value.notices[0]
    assert notice.weight == "stops"
    assert "--into" in notice.remedy


def test_a_file_and_a_link_are_no_folder(tmp_path: Path) -> None:
    (tmp_path / "file").write_bytes(b"x")
    (tmp_path / "home").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "home", target_is_directory=True)
    for name in ("file", "link"):
        with pytest.raises(CampaignStops, match="is not a folder"):
            check_ours(tmp_path / name)
    assert list((tmp_path / "home").iterdir()) == []


@pytest.mark.parametrize("address", ["../out.html", "/etc/x", "a/../../b", "a\\b", "C:/x", "a\0b"])
def test_an_address_that_leaves_the_folder_is_refused(tmp_path: Path, address: str) -> None:
    with pytest.raises(ValueError, match="leaves the folder"):
        write_folder({address: b""}, tmp_path / "site")
    assert list(tmp_path.iterdir()) == []


def test_what_stands_in_the_way_and_is_not_ours_stays(tmp_path: Path) -> None:
    (tmp_path / ".site.new").mkdir()
    (tmp_path / ".site.new" / "mine").write_bytes(b"x")
    with pytest.raises(CampaignStops, match="stands in the way"):
        write_folder(FILES, tmp_path / "site")
    assert (tmp_path / ".site.new" / "mine").read_bytes() == b"x"


def test_a_folder_that_cannot_be_written_is_a_notice(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    write_folder(FILES, tmp_path / "site")

    def full(self: Path, data: bytes) -> int:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(CampaignStops, match="No space left"):
        write_folder({"index.html": b"second"}, tmp_path / "site")
    assert (tmp_path / "site" / "index.html").read_bytes() == b"first"


def test_what_somebody_put_into_a_site_is_kept_and_nothing_is_written(tmp_path: Path) -> None:
    site = tmp_path / "site"
    for name in ("thesis.txt", "tables/mine.csv", "own/notes.md"):
        write_folder(FILES, site)
        (site / name).parent.mkdir(exist_ok=True)
        (site / name).write_text("years of work", encoding="utf-8")
        with pytest.raises(CampaignStops, match=name):
            write_folder({"index.html": b"second"}, site)
        assert content_of(site).keys() == {*FILES, MARKER, name}
        assert (site / "index.html").read_bytes() == b"first"
        (site / name).unlink()
        if not any((site / name).parent.iterdir()):
            (site / name).parent.rmdir()


def test_a_link_and_an_empty_folder_in_a_site_are_somebodys(tmp_path: Path) -> None:
    site, home = tmp_path / "site", tmp_path / "home"
    home.mkdir()
    (home / "mine").write_bytes(b"x")
    for place in ("tables/link", "link"):
        write_folder(FILES, site)
        (site / place).symlink_to(home, target_is_directory=True)
        with pytest.raises(CampaignStops, match="link"):
            write_folder(FILES, site)
        (site / place).unlink()
    (site / "index.html").unlink()
    (site / "index.html").symlink_to(home / "mine")
    with pytest.raises(CampaignStops, match=r"index\.html"):
        write_folder(FILES, site)
    (site / "index.html").unlink()
    (site / "empty").mkdir()
    with pytest.raises(CampaignStops, match="empty"):
        write_folder(FILES, site)
    assert content_of(home) == {"mine": b"x"}


def test_what_a_file_manager_left_does_not_matter(tmp_path: Path) -> None:
    write_folder(FILES, tmp_path / "site")
    (tmp_path / "site" / "tables" / ".DS_Store").write_bytes(b"x")
    write_folder({"index.html": b"second"}, tmp_path / "site")
    assert content_of(tmp_path / "site").keys() == {"index.html", MARKER}


def test_a_place_that_cannot_be_moved_is_left_as_it_was(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A folder on which another file system is mounted can be neither exchanged nor moved away."""
    write_folder(FILES, tmp_path / "site")

    def busy(source: object, target: object) -> None:
        raise OSError(16, "Device or resource busy")

    monkeypatch.setattr("campaign.pages.output.exchange_folders", lambda first, second: False)
    monkeypatch.setattr(os, "replace", busy)
    with pytest.raises(CampaignStops, match="busy"):
        write_folder({"index.html": b"second"}, tmp_path / "site")
    assert content_of(tmp_path / "site").keys() == {*FILES, MARKER}
    assert [path.name for path in tmp_path.iterdir()] == ["site"]


def test_without_an_exchange_the_old_site_is_moved_away_first(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("campaign.pages.output.exchange_folders", lambda first, second: False)
    for content in (b"first", b"second"):
        write_folder({"index.html": content}, tmp_path / "site")
        assert (tmp_path / "site" / "index.html").read_bytes() == content
    assert [path.name for path in tmp_path.iterdir()] == ["site"]


def test_a_removal_that_was_killed_goes_on(tmp_path: Path) -> None:
    """The marker goes last, so that what is left of an old site is still known as ours."""
    write_folder(FILES, tmp_path / "site")
    write_folder(FILES, tmp_path / ".site.new")
    (tmp_path / ".site.new" / "index.html").unlink()
    write_folder({"index.html": b"second"}, tmp_path / "site")
    assert [path.name for path in tmp_path.iterdir()] == ["site"]


def test_an_old_site_moved_away_by_a_killed_run_is_put_back(tmp_path: Path) -> None:
    """The moment between the two steps of the swap: the old folder is away, the new one not yet in."""
    site = tmp_path / "site"
    write_folder(FILES, site)
    os.replace(site, tmp_path / ".site.old")
    with pytest.raises(ValueError, match="leaves"):
        write_folder({"../x": b""}, site)
    write_folder({"index.html": b"second"}, site)
    assert content_of(site)["index.html"] == b"second"
    assert [path.name for path in tmp_path.iterdir()] == ["site"]
