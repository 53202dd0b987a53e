"""Writing a folder of files: aside, then swapped in; a folder that is not ours is never touched.

A marker file says that a folder was written by this program. While a new folder is written the old one
stands; it is moved away in one step and the new one moved in. A run that is killed leaves the old folder or
the new, or, between the two steps, neither with the old one beside it, which the next run puts back.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Mapping
from pathlib import Path, PurePosixPath

from campaign.notices import CampaignStops, Notice

MARKER = "campaign-site.txt"
_MARKER_TEXT = (
    "This folder was written by campaign report. Writing the report again replaces it as a whole:\n"
    "keep nothing of your own in it.\n"
)


def write_folder(files: Mapping[str, bytes], into: Path) -> None:
    """Write *files* (bytes by address with forward slashes) as the whole content of *into*.

    Raises
    ------
    CampaignStops
        Where *into* holds anything that this program did not write, or is no folder, or cannot be written.
    ValueError
        Where an address leaves the folder.
    """
    into = into.absolute()
    for address in files:
        _check_address(address)
    _put_back(into)
    check_ours(into)
    aside, away = _beside(into, "new"), _beside(into, "old")
    try:
        _remove(aside)
        _write_all(files, aside)
        _swap(aside, into, away)
    except OSError as fault:
        raise CampaignStops([_notice(into, f"cannot be written ({fault.strerror or fault})")]) from fault


def check_ours(into: Path) -> None:
    """Stop unless *into* may be replaced: it does not exist, is empty, or carries our marker.

    Raises
    ------
    CampaignStops
        With what was found and the way out.
    """
    if into.is_symlink() or (into.exists() and not into.is_dir()):
        raise CampaignStops([_notice(into, "is not a folder")])
    if into.is_dir() and any(into.iterdir()) and not (into / MARKER).is_file():
        raise CampaignStops([_notice(into, "holds files that campaign report did not write")])


def _write_all(files: Mapping[str, bytes], folder: Path) -> None:
    folder.mkdir(parents=True)
    (folder / MARKER).write_text(_MARKER_TEXT, encoding="utf-8", newline="\n")
    for parent in sorted({str(PurePosixPath(address).parent) for address in files}):
        (folder / parent).mkdir(parents=True, exist_ok=True)
    for address, content in files.items():
        (folder / address).write_bytes(content)


def _swap(aside: Path, into: Path, away: Path) -> None:
    if into.exists():
        os.replace(into, away)
    os.replace(aside, into)
    _remove(away)


def _put_back(into: Path) -> None:
    """Mend what a killed run left: put the old folder back if the new one never arrived, else remove it."""
    away = _beside(into, "old")
    if (away / MARKER).is_file() and not into.exists():
        os.replace(away, into)
    elif away.exists() or away.is_symlink():
        _remove(away)


def _remove(folder: Path) -> None:
    """Remove a folder that carries our name and our marker; anything else of that name is somebody's."""
    if not folder.exists() and not folder.is_symlink():
        return
    if (
        folder.is_symlink()
        or not folder.is_dir()
        or (any(folder.iterdir()) and not (folder / MARKER).is_file())
    ):
        raise CampaignStops([_notice(folder, "stands in the way and was not written by campaign report")])
    shutil.rmtree(folder)


def _beside(into: Path, word: str) -> Path:
    return into.with_name(f".{into.name}.{word}")


def _check_address(address: str) -> None:
    path = PurePosixPath(address)
    if path.is_absolute() or ".." in path.parts or "\\" in address or ":" in address or "\0" in address:
        raise ValueError(f"the address {address!r} leaves the folder")


def _notice(folder: Path, what: str) -> Notice:
    return Notice(
        code="output-folder",
        weight="stops",
        file=None,
        line=None,
        column=None,
        what=f"the output folder {folder.name} {what}",
        done="nothing was written",
        remedy="name another folder with --into, or empty this one",
    )
