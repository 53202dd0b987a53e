"""A kept site is found while nothing changed, and never where anything did."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import pytest

from campaign.keeping.kept_site import MadeSite, SiteKeeper
from campaign.keeping.store import Store, open_store

MADE = MadeSite({"index.html": b"<p>page</p>", "data/a.js": bytes(range(256))}, "what was read\n", True)


@pytest.fixture
def places(tmp_path: Path) -> tuple[Path, Path, Path]:
    """Return a campaign folder with a recording and a note, a place for the site, and templates."""
    folder, templates = tmp_path / "panels", tmp_path / "templates"
    (folder / "trials").mkdir(parents=True)
    templates.mkdir()
    (folder / "campaign.toml").write_text("format = 1\n")
    (folder / "trials" / "a.csv").write_text("1,2\n")
    (templates / "frame.html").write_text("frame")
    return folder, folder / "report", templates


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return open_store(tmp_path / "cache" / "results.sqlite")


def keep(store: Store, places: tuple[Path, Path, Path]) -> None:
    keeper = SiteKeeper(store, *places)
    assert keeper.find() is None
    keeper.keep(MADE, {})


def test_the_same_site_while_nothing_changed(store: Store, places: tuple[Path, Path, Path]) -> None:
    keep(store, places)
    assert SiteKeeper(store, *places).find() == MADE


def test_times_of_files_and_the_site_itself_do_not_count(
    store: Store, places: tuple[Path, Path, Path]
) -> None:
    folder, site, _ = places
    keep(store, places)
    os.utime(folder / "trials" / "a.csv", ns=(5, 5))
    site.mkdir()
    (site / "index.html").write_text("the site, written")
    assert SiteKeeper(store, *places).find() == MADE


CHANGES: dict[str, Callable[[Path, Path], object]] = {
    "a recording, of the same size": lambda folder, _: (folder / "trials" / "a.csv").write_text("1,3\n"),
    "the description": lambda folder, _: (folder / "campaign.toml").write_text("format = 1\n\n"),
    "one file more": lambda folder, _: (folder / "trials" / "b.csv").write_text(""),
    "one file less": lambda folder, _: (folder / "trials" / "a.csv").unlink(),
    "another name": lambda folder, _: (folder / "trials" / "a.csv").rename(folder / "trials" / "b.csv"),
    "an empty folder": lambda folder, _: (folder / "empty").mkdir(),
    "a link": lambda folder, _: (folder / "link").symlink_to("campaign.toml"),
    "a template": lambda _, templates: (templates / "frame.html").write_text("Frame"),
}


@pytest.mark.parametrize("change", CHANGES)
def test_nothing_where_anything_changed(change: str, store: Store, places: tuple[Path, Path, Path]) -> None:
    keep(store, places)
    CHANGES[change](places[0], places[2])
    assert SiteKeeper(store, *places).find() is None


def test_a_change_that_keeps_size_and_time_is_seen(store: Store, places: tuple[Path, Path, Path]) -> None:
    keep(store, places)
    file = places[0] / "trials" / "a.csv"
    time = file.stat().st_mtime_ns
    file.write_text("1,3\n")
    os.utime(file, ns=(time, time))
    assert SiteKeeper(store, *places).find() is None


def test_a_folder_that_changed_meanwhile_is_not_kept(store: Store, places: tuple[Path, Path, Path]) -> None:
    keeper = SiteKeeper(store, *places)
    assert keeper.find() is None
    (places[0] / "trials" / "late.csv").write_text("late")
    keeper.keep(MADE, {})
    assert SiteKeeper(store, *places).find() is None


EARLIER_CHANGES: dict[str, Callable[[Path], object]] = {
    "a recording of it, of the same size": lambda earlier: (earlier / "a.csv").write_text("3,1\n"),
    "one file more of it": lambda earlier: (earlier / "b.csv").write_text(""),
    "it is gone": lambda earlier: earlier.rename(earlier.with_name("elsewhere")),
}


def keep_with_earlier(store: Store, places: tuple[Path, Path, Path], earlier: Path) -> None:
    """Keep a site that was also made from what lies outside its campaign folder."""
    earlier.mkdir()
    (earlier / "a.csv").write_text("1,2\n")
    os.utime(earlier / "a.csv", ns=(5, 5))
    keeper = SiteKeeper(store, *places)
    assert keeper.find() is None
    keeper.keep(MADE, {}, [earlier])


@pytest.mark.parametrize("change", EARLIER_CHANGES)
def test_what_lies_elsewhere_counts_as_well(
    change: str, store: Store, places: tuple[Path, Path, Path], tmp_path: Path
) -> None:
    earlier = tmp_path / "first_process"
    keep_with_earlier(store, places, earlier)
    assert SiteKeeper(store, *places).find() == MADE
    EARLIER_CHANGES[change](earlier)
    assert SiteKeeper(store, *places).find() is None


def test_what_changed_elsewhere_meanwhile_is_not_kept(
    store: Store, places: tuple[Path, Path, Path], tmp_path: Path
) -> None:
    archive = tmp_path / "first_process.zip"
    archive.write_bytes(b"sealed")
    keeper = SiteKeeper(store, *places)
    assert keeper.find() is None
    archive.write_bytes(b"sealed again")
    keeper.keep(MADE, {}, [archive])
    assert SiteKeeper(store, *places).find() is None


def test_hashes_of_what_was_read_are_believed(store: Store, places: tuple[Path, Path, Path]) -> None:
    keeper = SiteKeeper(store, *places)
    keeper.find()
    keeper.keep(MADE, {"trials/a.csv": "of other bytes, which were read before they changed"})
    assert SiteKeeper(store, *places).find() is None


def test_without_a_store_nothing_is_found(places: tuple[Path, Path, Path]) -> None:
    keeper = SiteKeeper(Store(None), *places)
    keeper.keep(MADE, {})
    assert keeper.find() is None
