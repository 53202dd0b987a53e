"""A synthetic campaign as a folder: gather every file in memory, then write all of them or none."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Mapping
from pathlib import Path


class FolderHoldsOther(Exception):  # noqa: N818 - a refusal, worded for the command line
    """The folder to be written holds files that are not the campaign's own."""


def write_campaign(files: Mapping[str, bytes], into: Path) -> None:
    """Write a campaign's files, given by their path from its folder, as the whole content of *into*.

    The folder may exist already and hold files of the same paths: they are replaced. All is written beside it
    first and then moved in, so that no half-written campaign is left where writing fails.

    Raises
    ------
    FolderHoldsOther
        If *into* holds any other file, or is no folder; nothing is written then.
    """
    into = into.absolute()
    if into.is_symlink() or (into.exists() and not into.is_dir()):
        raise FolderHoldsOther(f"{into} is not a folder: name a new or an empty folder")
    strangers = sorted(set(_paths_in(into)) - set(files))
    if strangers:
        raise FolderHoldsOther(
            f"{into} holds {len(strangers)} other file(s), the first is {strangers[0]}: "
            "name a new or an empty folder"
        )
    into.parent.mkdir(parents=True, exist_ok=True)
    beside = Path(tempfile.mkdtemp(prefix=f".{into.name}.", dir=into.parent))
    try:
        _write_all(files, beside / "new")
        if into.exists():
            os.replace(into, beside / "old")
        os.replace(beside / "new", into)
    finally:
        shutil.rmtree(beside, ignore_errors=True)


def _write_all(files: Mapping[str, bytes], folder: Path) -> None:
    folder.mkdir()
    for path, data in sorted(files.items()):
        target = folder / path
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_bytes(data)


def _paths_in(folder: Path) -> list[str]:
    if not folder.exists():
        return []
    return [path.relative_to(folder).as_posix() for path in folder.rglob("*") if not path.is_dir()]
