"""Writing a folder of files: aside, then swapped in; a folder that is not ours is never touched.

A marker file says that a folder was written by this program, and lists what was written. A folder without
it, or with anything that it does not list, is somebody's: it is refused, and nothing in it is touched.

While a new folder is written the old one stands. Where the system can exchange two folders in one step
(Linux, macOS), a run that is killed leaves the old one whole or the new one whole. Elsewhere the old one is
moved away and the new one moved in; killed between the two, the next run puts the old one back.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path, PurePosixPath

from campaign.notices import CampaignStops, Notice
from campaign.pages.exchange import exchange_folders

MARKER = "campaign-site.txt"
_MARKER_TEXT = (
    "This folder was written by campaign report, which replaces it as a whole when it writes again.\n"
    "Where anything stands in it that is not listed here, it is left alone and nothing is written.\n\n"
)
_OF_THE_SYSTEM = frozenset({".DS_Store", "Thumbs.db", "desktop.ini", ".directory"})
"""What file managers put into folders that are only looked at."""


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
        _leave_nothing(aside)
        raise CampaignStops([_notice(into, f"cannot be written ({fault.strerror or fault})")]) from fault


def _leave_nothing(aside: Path) -> None:
    """Remove what was begun, as far as that can be done: what stopped the writing may stop this too."""
    try:
        _remove(aside)
    except OSError:
        return


def check_ours(into: Path) -> None:
    """Stop unless *into* may be replaced: it does not exist, is empty, or holds what our marker lists alone.

    Raises
    ------
    CampaignStops
        With what was found and the way out.
    """
    if into.is_symlink() or (into.exists() and not into.is_dir()):
        raise CampaignStops([_notice(into, "is not a folder")])
    if not into.is_dir() or not any(into.iterdir()):
        return
    if (into / MARKER).is_symlink() or not (into / MARKER).is_file():
        raise CampaignStops([_notice(into, "holds files that campaign report did not write")])
    if foreign := next(_foreign(into), None):
        raise CampaignStops([_notice(into, f"holds what campaign report did not write ({foreign!r})")])


def _foreign(folder: Path) -> Iterator[str]:
    """Addresses of files, links and empty folders that the marker of *folder* does not list."""
    text = (folder / MARKER).read_text(encoding="utf-8", errors="replace")
    _, lists, listing = text.partition("\n\n")
    if not lists:
        return  # written before markers listed anything
    listed = set(listing.splitlines())
    folders = {str(parent) for address in listed for parent in PurePosixPath(address).parents}
    for place, names, files in os.walk(folder):
        within = Path(place).relative_to(folder)
        links = [name for name in names if (Path(place) / name).is_symlink()]
        for name in sorted({*files, *links} - _OF_THE_SYSTEM):
            address = (within / name).as_posix()
            if address != MARKER and (address not in listed or (folder / address).is_symlink()):
                yield address
        if within.as_posix() not in folders and within != Path():
            yield within.as_posix()


def _write_all(files: Mapping[str, bytes], folder: Path) -> None:
    folder.mkdir(parents=True)
    (folder / MARKER).write_text(_marker(files), encoding="utf-8", newline="\n")
    for parent in sorted({str(PurePosixPath(address).parent) for address in files}):
        (folder / parent).mkdir(parents=True, exist_ok=True)
    for address, content in files.items():
        (folder / address).write_bytes(content)


def _marker(addresses: Iterable[str]) -> str:
    return _MARKER_TEXT + "".join(f"{address}\n" for address in sorted(addresses))


def _swap(aside: Path, into: Path, away: Path) -> None:
    if into.exists() and exchange_folders(aside, into):
        _remove(aside)
        return
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
    for entry in folder.iterdir():
        if entry.name == MARKER:
            continue
        if entry.is_dir() and not entry.is_symlink():
            shutil.rmtree(entry)
        else:
            entry.unlink()
    (folder / MARKER).unlink(missing_ok=True)  # last: a run that is killed here leaves what is known as ours
    folder.rmdir()


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
