"""A whole site from one run to the next: where nothing of a campaign changed, it is written as it was.

What a site is made of is the content of every file of the campaign folder and of the earlier campaigns that
it names, wherever they lie, and the program. All are compared by hashes of the bytes, never by times; times
only tell early that comparing them is not worth while.
"""

from __future__ import annotations

import hashlib
import os
import stat
import time
import zlib
from collections.abc import Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from campaign.keeping.program import digest_of, program_digest, versions_of
from campaign.keeping.store import Store

PAGE_LIBRARIES = ("jinja2", "latex2mathml", "markdown", "markupsafe", "nh3", "orjson", "plotly")
"""Libraries whose version may change a page."""

_ELSEWHERE = "\0"
"""What names of entries outside the campaign folder begin with: no name of a file holds it."""

_CLOCK_NS = 2_000_000_000
"""Nanoseconds by which times of files may lag behind the clock: coarse file systems keep even seconds."""

_QUICK = 1
"""Level of compression: pages shrink to a sixth at little cost."""

Kind = Literal["file", "folder", "link", "other"]


@dataclass(frozen=True)
class Entry:
    """One entry of a campaign folder: what it is, size and time of change, or where a link leads."""

    kind: Kind
    size_bytes: int = 0
    modified_ns: int = 0
    target: str = ""


@dataclass(frozen=True)
class MadeSite:
    """A site before it is written.

    Attributes
    ----------
    files
        Bytes of every file by address.
    said
        What the run says of what it read.
    set_aside
        Whether anything was set aside unasked.
    """

    files: dict[str, bytes]
    said: str
    set_aside: bool


class SiteKeeper:
    """Keeps the site of one campaign folder and finds it again while nothing changed.

    Parameters
    ----------
    store
        Where it is kept.
    folder
        The campaign folder.
    site
        The folder that the site is written to: where it lies inside *folder* it is none of its content.
    templates
        The folder of templates, which are part of the program.
    """

    def __init__(self, store: Store, folder: Path, site: Path, templates: Path) -> None:
        self.site = site
        self._store = store
        self._folder = folder
        self._apart = tuple(p for p in _beside(site.resolve()) if p.is_relative_to(folder.resolve()))
        self._templates = templates
        self._elsewhere: tuple[Path, ...] = ()
        self._before: dict[str, Entry] | None = None
        self._began_ns = time.time_ns()

    def find(self) -> MadeSite | None:
        """Return the site that an earlier run made of the very same content, or ``None``."""
        if not self._store.is_open:
            return None
        self._elsewhere = _paths(self._store.get(self._key("elsewhere")))
        self._before = self._listing()
        known = self._store.get(self._key("content"))
        if self._before is None or not isinstance(known, dict) or not self._is_unchanged(known):
            return None
        return _unpacked(self._store.get(self._key("site")), _digest_of_content(known))

    def keep(self, made: MadeSite, hashes: Mapping[str, str], elsewhere: Sequence[Path] = ()) -> None:
        """Keep a site for the next run; not where the folder changed while it was made.

        Parameters
        ----------
        made
            The site.
        hashes
            SHA-256 of what was read of the recordings, by path from the campaign folder.
        elsewhere
            Folders and files besides the campaign folder that the site was made from: earlier campaigns.
        """
        if self._before is None:
            return
        if tuple(elsewhere) != self._elsewhere:
            self._elsewhere = tuple(elsewhere)
            self._before = self._with_elsewhere(self._before)
        if self._before is None or self._listing() != self._before:
            return
        try:
            content = {
                name: [entry.kind, entry.size_bytes, entry.modified_ns, self._content(name, entry, hashes)]
                for name, entry in self._before.items()
            }
        except OSError:
            return
        packed = {name: zlib.compress(data, _QUICK) for name, data in made.files.items()}
        said = [_digest_of_content(content), packed, made.said, made.set_aside]
        self._store.put(self._key("elsewhere"), [os.fspath(path) for path in self._elsewhere])
        if self._store.put(self._key("site"), said):
            self._store.put(self._key("content"), content)

    def _key(self, what: str) -> str:
        parts: list[str | bytes] = [what, program_digest(), versions_of(PAGE_LIBRARIES)]
        parts += [os.fsencode(path) for path in (self._folder.resolve(), *self._apart)]
        return digest_of([*parts, *_folder_parts(self._templates)])

    def _with_elsewhere(self, before: Mapping[str, Entry]) -> dict[str, Entry] | None:
        """Add what lies elsewhere, listed only now: ``None`` where any of it changed since the run began."""
        listed = self._listing() or {}
        further = {name: entry for name, entry in listed.items() if name.startswith(_ELSEWHERE)}
        late = any(entry.modified_ns >= self._began_ns - _CLOCK_NS for entry in further.values())
        inside = {name: entry for name, entry in before.items() if not name.startswith(_ELSEWHERE)}
        return None if late or not listed else dict(sorted((inside | further).items()))

    def _places(self) -> list[tuple[Path, str]]:
        """Folders whose entries count, and what their names begin with."""
        numbered = [(path, f"{_ELSEWHERE}{i}/") for i, path in enumerate(self._elsewhere)]
        return [(self._folder, ""), *numbered]

    def _listing(self) -> dict[str, Entry] | None:
        """Every entry below the folders by its path, sorted; ``None`` where one cannot be told."""
        found: dict[str, Entry] = {}
        waiting = [(place, prefix) for place, prefix in self._places() if place.is_dir()]
        try:
            for place, prefix in self._places():
                if not place.is_dir():
                    found[prefix] = _entry_of(place.lstat())
            while waiting:
                place, prefix = waiting.pop()
                with os.scandir(place) as entries:
                    for entry in entries:
                        name = prefix + entry.name
                        name.encode()
                        found[name] = _entry(entry)
                        if found[name].kind == "folder":
                            if Path(entry.path).resolve() in self._apart:
                                del found[name]
                            else:
                                waiting.append((Path(entry.path), f"{name}/"))
        except (OSError, UnicodeEncodeError):
            return None
        return dict(sorted(found.items()))

    def _is_unchanged(self, known: Mapping[str, Sequence[object]]) -> bool:
        now = self._before or {}
        if {n: (e.kind, e.size_bytes) for n, e in now.items()} != {n: tuple(k[:2]) for n, k in known.items()}:
            return False
        touched = [name for name, entry in now.items() if known[name][2] != entry.modified_ns]
        others = [name for name in now if name not in set(touched)]
        return self._are_as_known(touched, known) and self._are_as_known(others, known)

    def _are_as_known(self, names: Iterable[str], known: Mapping[str, Sequence[object]]) -> bool:
        now = self._before or {}
        with ThreadPoolExecutor(os.cpu_count()) as threads:
            checks = threads.map(lambda name: self._content(name, now[name], {}) == known[name][3], names)
            try:
                return all(checks)
            except OSError:
                return False
            finally:
                threads.shutdown(cancel_futures=True)

    def _content(self, name: str, entry: Entry, hashes: Mapping[str, str]) -> str:
        """Say what an entry holds: the hash of a file's bytes, where a link leads."""
        if entry.kind != "file":
            return entry.target
        if name.isascii() and name.isprintable() and name in hashes:
            return hashes[name]
        return hashlib.sha256(self._path(name).read_bytes()).hexdigest()

    def _path(self, name: str) -> Path:
        """Where the entry of this name lies."""
        if not name.startswith(_ELSEWHERE):
            return self._folder / name
        number, _, rest = name.removeprefix(_ELSEWHERE).partition("/")
        return self._elsewhere[int(number)] / rest


def _entry(found: os.DirEntry[str]) -> Entry:
    status = found.stat(follow_symlinks=False)
    if stat.S_ISLNK(status.st_mode):
        return Entry("link", target=os.readlink(found.path))
    return _entry_of(status)


def _entry_of(status: os.stat_result) -> Entry:
    if stat.S_ISREG(status.st_mode):
        return Entry("file", status.st_size, status.st_mtime_ns)
    return Entry("folder" if stat.S_ISDIR(status.st_mode) else "other")


def _paths(kept: object) -> tuple[Path, ...]:
    return tuple(Path(str(path)) for path in kept) if isinstance(kept, list) else ()


def _beside(site: Path) -> tuple[Path, ...]:
    """The site's folder, and those that stand beside it while it is written."""
    return site, *(site.with_name(f".{site.name}.{word}") for word in ("new", "old"))


def _folder_parts(folder: Path) -> list[bytes]:
    files = sorted(path for path in folder.rglob("*") if path.is_file())
    return [part for path in files for part in (str(path.relative_to(folder)).encode(), path.read_bytes())]


def _digest_of_content(content: Mapping[str, Sequence[object]]) -> str:
    told = ((name, str(kind), str(size), str(held)) for name, (kind, size, _, held) in content.items())
    return digest_of(part for parts in told for part in parts)


def _unpacked(kept: object, content: str) -> MadeSite | None:
    if not isinstance(kept, list) or len(kept) != 4 or kept[0] != content:
        return None
    _, packed, said, set_aside = kept
    return MadeSite({name: zlib.decompress(data) for name, data in packed.items()}, said, set_aside)
