"""The campaign folder as found: every file of it on exactly one list, before any recording is opened."""

from __future__ import annotations

import os
import stat
import unicodedata
from collections import Counter, defaultdict
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

from campaign.notices import CampaignStops, Notice
from campaign.recordings.description import DESCRIPTION_FILE, Description
from campaign.recordings.description_file import load_description
from campaign.recordings.file_glob import glob_expression, matches_glob
from campaign.recordings.register import REGISTERS, Registers, read_registers, shown

OUTPUT_MARKER = "campaign-site.txt"
"""Name of the file that says that a folder is our own output; the pages write it, here it is left out."""

LARGEST_RECORDING_BYTES = 2**30
"""Size above which a recording is set aside unread: it would not fit beside its values in memory."""

List = Literal["recording", "set aside", "not a recording"]


@dataclass(frozen=True)
class SurveyedFile:
    """One file of the campaign folder.

    Attributes
    ----------
    file
        Path from the campaign folder with forward slashes; what cannot be seen in it is spelled out.
    location
        The file on disk.
    size_bytes, modified_ns
        Size and time of change when the folder was surveyed.
    list
        ``"recording"`` (to be read), ``"set aside"`` (named as a recording, cannot be one) or
        ``"not a recording"``.
    what
        What it is where it is not read: ``"description"``, ``"register"``, ``"note"``, ``"link"``, ….
    """

    file: str
    location: Path
    size_bytes: int
    modified_ns: int
    list: List
    what: str = ""


@dataclass(frozen=True)
class Survey:
    """A campaign folder, surveyed.

    Attributes
    ----------
    folder
        The campaign folder.
    description, registers
        What the lab says of it.
    files
        Every file, sorted by path; those of other campaigns inside it and of our own output are not among
        them.
    other_campaigns
        Folders inside with a description of their own.
    notices
        Remarks on description, registers and folder.
    """

    folder: Path
    description: Description
    registers: Registers
    files: tuple[SurveyedFile, ...]
    other_campaigns: tuple[str, ...] = ()
    notices: tuple[Notice, ...] = ()

    def on_list(self, name: List) -> tuple[SurveyedFile, ...]:
        """Return the files of one list, sorted by path."""
        return tuple(file for file in self.files if file.list == name)

    @property
    def recordings(self) -> tuple[SurveyedFile, ...]:
        """Files that are to be read."""
        return self.on_list("recording")


@dataclass
class _Found:
    """What walking a tree brings back."""

    files: list[tuple[str, Path, os.stat_result | None]] = field(default_factory=list)
    other_campaigns: list[str] = field(default_factory=list)
    notices: list[Notice] = field(default_factory=list)

    def note(self, code: str, file: str, what: str, done: str, remedy: str = "", heavy: bool = True) -> None:
        self.notices.append(
            Notice(code, "set aside" if heavy else "noted", file, None, None, what, done, remedy)
        )


def survey_folder(folder: Path, output: Path | None = None) -> Survey:
    """Read the description and the registers, and put every file of the folder on one list.

    Parameters
    ----------
    folder
        The campaign folder.
    output
        A folder that a report is written to; where it lies inside *folder* its files are not counted.

    Returns
    -------
    Survey
        No recording has been opened yet.

    Raises
    ------
    CampaignStops
        Where description or registers cannot be relied upon, or no file is named as a recording; all faults
        at once.
    """
    registers = read_registers(folder)
    faults = [notice for notice in registers.notices if notice.weight == "stops"]
    try:
        description = load_description(folder)
    except CampaignStops as stops:
        raise CampaignStops([*stops.notices, *faults]) from None
    if faults:
        raise CampaignStops(faults)
    found = _walk(folder, output)
    files = tuple(sorted(_put_on_lists(found, description), key=lambda f: f.file))
    survey = Survey(
        folder,
        description,
        registers,
        files,
        tuple(sorted(found.other_campaigns)),
        (*description.notices, *registers.notices, *found.notices, *_near_misses(files, description)),
    )
    if not any(file.list != "not a recording" for file in files):
        raise CampaignStops([_nothing_named(survey)])
    return survey


def list_files(folder: Path) -> tuple[tuple[str, Path], ...]:
    """Return every ordinary file below a folder, as (path with forward slashes, location), sorted.

    Links are not followed; folders of other campaigns and of our own output are left out.
    """
    found = _walk(folder, None)
    ordinary = (f for f in found.files if f[2] is not None and stat.S_ISREG(f[2].st_mode))
    return tuple(sorted((name, location) for name, location, _ in ordinary))


def _walk(folder: Path, output: Path | None) -> _Found:
    found = _Found()
    aside = output.resolve() if output is not None else None
    waiting = [(folder, "")]
    while waiting:
        place, prefix = waiting.pop()
        entries = _entries(place, prefix, found)
        names = {entry.name for entry in entries}
        if prefix and DESCRIPTION_FILE in names:
            found.other_campaigns.append(prefix.rstrip("/"))
            what = "this folder has a description of its own: another campaign"
            found.note("another-campaign", prefix, what, "none of its files are this one's", heavy=False)
        elif prefix and OUTPUT_MARKER in names and place.resolve() != aside:
            found.note("own-output", prefix, "a site written by this program", "not counted", heavy=False)
        elif not prefix or place.resolve() != aside:
            waiting += _sort_entries(entries, prefix, found)
    return found


def _entries(place: Path, prefix: str, found: _Found) -> list[os.DirEntry[str]]:
    try:
        with os.scandir(place) as entries:
            return list(entries)
    except OSError as fault:
        what = f"the folder cannot be opened ({fault.strerror})"
        found.note("unreadable-folder", prefix or ".", what, "nothing in it is read", "make it readable")
        return []


def _sort_entries(
    entries: Iterable[os.DirEntry[str]], prefix: str, found: _Found
) -> Iterator[tuple[Path, str]]:
    """Note the files among some entries and yield the folders."""
    for entry in entries:
        name, location = prefix + shown(entry.name), Path(entry.path)
        try:
            if entry.is_dir(follow_symlinks=False):
                yield location, name + "/"
                continue
            found.files.append((name, location, entry.stat(follow_symlinks=False)))
        except OSError:
            found.files.append((name, location, None))


def _put_on_lists(found: _Found, description: Description) -> Iterator[SurveyedFile]:
    for name, location, status in found.files:
        named = _is_named(name, description)
        if status is None:
            what = "the file was gone before it could be looked at"
            found.note("vanished", name, what, "not read", "do not move files while a report runs", named)
            yield SurveyedFile(name, location, 0, 0, _not_read(named), "gone")
        elif (unusual := _unusual(status)) is not None and (named or unusual == "link"):
            yield _note_unusual(found, name, location, status, named, unusual)
        elif named:
            _note_name(found, name, location)
            yield SurveyedFile(name, location, status.st_size, status.st_mtime_ns, "recording")
        else:
            what = unusual or _what_it_is(name)
            size = status.st_size if stat.S_ISREG(status.st_mode) else 0
            yield SurveyedFile(name, location, size, status.st_mtime_ns, "not a recording", what)


def _not_read(named: bool) -> List:
    return "set aside" if named else "not a recording"


def _is_named(name: str, description: Description) -> bool:
    """Whether the description names a file as a recording; its own files at the top never are."""
    own = name == DESCRIPTION_FILE or name in {f"{register}.csv" for register in REGISTERS}
    return not own and any(matches_glob(name, pattern) for pattern in description.files)


def _unusual(status: os.stat_result) -> str | None:
    if stat.S_ISLNK(status.st_mode):
        return "link"
    if not stat.S_ISREG(status.st_mode):
        return "no ordinary file"
    return "too large" if status.st_size > LARGEST_RECORDING_BYTES else None


def _note_unusual(
    found: _Found, name: str, location: Path, status: os.stat_result, named: bool, unusual: str
) -> SurveyedFile:
    if unusual == "link":
        target = "a folder" if location.is_dir() else "a file" if location.exists() else "nothing"
        what, done = f"a link to {target}", "links are not followed"
        found.note(
            "link", name, what, done, "put the files themselves in the folder", named or target == "a folder"
        )
    elif unusual == "too large":
        what = f"{status.st_size / 2**30:.1f} GiB, more than {LARGEST_RECORDING_BYTES // 2**30} GiB"
        found.note("too-large", name, what, "not read", "log more sparsely, or split the file")
    else:
        found.note("no-ordinary-file", name, "a pipe, socket or device", "never opened", "remove it")
    size = status.st_size if stat.S_ISREG(status.st_mode) else 0
    return SurveyedFile(name, location, size, status.st_mtime_ns, _not_read(named), unusual)


def _note_name(found: _Found, name: str, location: Path) -> None:
    if shown(location.name) != location.name:
        what = "the file's name holds characters that cannot be seen, or is not UTF-8"
        found.note("name-spelled-out", name, what, "they are spelled out", "rename the file", heavy=False)


def _what_it_is(name: str) -> str:
    if name == DESCRIPTION_FILE:
        return "description"
    if name in {f"{register}.csv" for register in REGISTERS}:
        return "register"
    return "note" if name.startswith("notes/") else "other file"


def _near_misses(files: Iterable[SurveyedFile], description: Description) -> list[Notice]:
    """Note names that differ in upper and lower case only, from a pattern or from one another."""
    notices = []
    folded = [glob_expression(pattern.casefold()) for pattern in description.files]
    by_folded: dict[str, list[str]] = defaultdict(list)
    for file in files:
        plain = unicodedata.normalize("NFC", file.file).casefold()
        by_folded[plain].append(file.file)
        if file.what == "other file" and any(pattern.fullmatch(plain) for pattern in folded):
            what = "the name matches [recordings] files but for upper and lower case"
            remedy = "add a pattern for it, or rename it"
            notices.append(Notice("case-of-name", "noted", file.file, None, None, what, "not read", remedy))
    for names in by_folded.values():
        if len(names) > 1:
            what = f"names that many systems cannot tell apart: {' and '.join(names)}"
            notices.append(
                Notice("twin-names", "noted", names[1], None, None, what, "kept apart", "rename one")
            )
    return notices


def _nothing_named(survey: Survey) -> Notice:
    patterns = ", ".join(f"'{pattern}'" for pattern in survey.description.files)
    endings = Counter(
        Path(file.file).suffix or "no ending" for file in survey.files if file.what == "other file"
    )
    seen = ", ".join(f"{count} with {ending}" for ending, count in endings.most_common(4)) or "no other file"
    what = f"[recordings] files = {patterns} matches none of the {len(survey.files)} files ({seen})"
    remedy = 'name the recordings, such as files = "trials/**/*.csv"'
    return Notice(
        "no-recordings", "stops", DESCRIPTION_FILE, None, None, what, "the campaign is not read", remedy
    )
