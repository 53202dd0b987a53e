"""A synthetic campaign as a folder: gather every file in memory, then write."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path


class FolderHoldsOther(Exception):  # noqa: N818 - a refusal, worded for the command line
    """The folder to be written holds files that are not the campaign's own."""


def write_campaign(files: Mapping[str, bytes], into: Path) -> None:
    """Write a campaign's files, given by their path from its folder, into *into*.

    The folder may exist already and hold files of the same paths: they are replaced. Nothing is removed.

    Raises
    ------
    FolderHoldsOther
        If *into* holds any other file; nothing is written then.
    """
    strangers = sorted(set(_paths_in(into)) - set(files))
    if strangers:
        raise FolderHoldsOther(
            f"{into} holds {len(strangers)} other file(s), the first is {strangers[0]}: "
            "name a new or an empty folder"
        )
    for path, data in sorted(files.items()):
        target = into / path
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_bytes(data)


def _paths_in(folder: Path) -> list[str]:
    if not folder.exists():
        return []
    return [path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()]
