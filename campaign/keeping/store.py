"""One file that holds results from one run to the next: a SQLite database in the user's cache folder.

Use it for whatever is worth keeping and is told by a digest::

    with open_store(cache_file()) as store:
        key = digest_of([program_digest(), "variance", encode(readings)])
        found = store.get(key)           # the value, or None
        if found is None:
            found = analyse(...)
            store.put(key, found)        # False where it cannot be kept

Values are those of :mod:`campaign.keeping.value_codec`. One process writes, the one that opened the store;
a second run at the same time finds it locked and goes without. Every entry carries a digest of its key and
its bytes and is believed only where that fits; a file that is damaged, or not ours, is thrown away and begun
anew. Nothing here ever stops a run: without a store the same is computed again.
"""

from __future__ import annotations

import hashlib
import os
import sqlite3
import sys
import time
from collections import defaultdict
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from types import TracebackType
from typing import Self, TypeVar

from campaign.keeping.value_codec import NotKept, decode, encode

FOLDER_VARIABLE = "CAMPAIGN_CACHE"
"""Environment variable that names another folder for the cache."""

FILE_NAME = "results.sqlite"

LARGEST_BYTES = 2**30
"""What is kept in all (1 GiB); beyond it, what was not used for longest is dropped first."""

KEPT_SHARE = 0.8
"""Share of :data:`LARGEST_BYTES` that is left when entries are dropped."""

PUTS_A_COMMIT = 500
"""A run that is killed loses at most so many entries."""

_APPLICATION = 0x63616D70
_FORMAT = 1
_SCHEMA = (
    "CREATE TABLE kept (key TEXT NOT NULL, content TEXT NOT NULL, used INTEGER NOT NULL, "
    "size INTEGER NOT NULL, mark BLOB NOT NULL, value BLOB NOT NULL, PRIMARY KEY (key, content))"
)
_KEYS_A_QUERY = 400
_WAIT_S = 0.2
_DAY_S = 86_400

T = TypeVar("T")

Say = Callable[[str], None]
"""Told, in a plain sentence, what became of the cache."""


class _Damaged(Exception):  # noqa: N818 - it never leaves this module
    """The file is not ours, or not as it was written."""


def say_on_stderr(sentence: str) -> None:
    """Say it on the error stream: a site never depends on what the cache went through."""
    print(sentence, file=sys.stderr)


def cache_file() -> Path:
    """Return where results are kept: in the user's cache folder, or in that of :data:`FOLDER_VARIABLE`."""
    from platformdirs import user_cache_path

    named = os.environ.get(FOLDER_VARIABLE)
    folder = Path(named) if named else user_cache_path("campaign-report", appauthor=False)
    return folder / FILE_NAME


def open_store(path: Path | None, say: Say = say_on_stderr, largest_bytes: int = LARGEST_BYTES) -> Store:
    """Open the store at *path*; ``None`` gives one that keeps nothing.

    Parameters
    ----------
    path
        The file; made, with its folder, where it is not there.
    say
        Told where the store cannot be used, or was thrown away.
    largest_bytes
        What is kept in all.
    """
    return Store(path, say, largest_bytes)


class Store:
    """Results by key, from one run to the next; where it cannot be used it keeps and finds nothing."""

    def __init__(
        self, path: Path | None, say: Say = say_on_stderr, largest_bytes: int = LARGEST_BYTES
    ) -> None:
        self._path = path
        self._say = say
        self._largest_bytes = largest_bytes
        self._connection: sqlite3.Connection | None = None
        self._waiting = 0
        self._met: list[tuple[str, str]] = []
        self._today = int(time.time() // _DAY_S)
        if path is not None:
            self._attempt(self._open)

    @property
    def is_open(self) -> bool:
        """Whether anything can be kept."""
        return self._connection is not None

    def get(self, key: str, content: str = "") -> object | None:
        """Return the value kept under a key (and, where one key has several contents, a content)."""
        return self.get_many([key]).get(key, {}).get(content)

    def get_many(self, keys: Sequence[str]) -> dict[str, dict[str, object]]:
        """Return what is kept under some keys: by key, then by content."""
        return self._guarded(lambda: self._read(keys)) or {}

    def holds(self, keys: Sequence[str]) -> set[str]:
        """Return which keys there is something under, without reading it: a hint, nothing to rely upon."""
        return self._guarded(lambda: self._present(keys)) or set()

    def put(self, key: str, value: object, content: str = "") -> bool:
        """Keep a value; ``False`` where it is none that can be kept, or there is no store."""
        try:
            return self.is_open and self.put_bytes(key, encode(value), content)
        except NotKept:
            return False

    def put_bytes(self, key: str, data: bytes, content: str = "") -> bool:
        """Keep what :func:`campaign.keeping.value_codec.encode` made."""
        return self._guarded(lambda: self._write(key, content, data)) or False

    def close(self) -> None:
        """Write down what was kept, drop what is too much, and close the file."""
        self._guarded(self._finish)
        self._drop_connection()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, where: TracebackType | None
    ) -> None:
        self.close()

    # ------------------------------------------------------------ whatever is wrong with the file

    def _guarded(self, act: Callable[[], T]) -> T | None:
        return self._attempt(act) if self._connection is not None else None

    def _attempt(self, act: Callable[[], T]) -> T | None:
        """Act on the file; where something is wrong with it, say so and go on with a new one, or without."""
        try:
            return act()
        except (_Damaged, NotKept) as fault:
            self._throw_away(str(fault))
        except sqlite3.Error as fault:
            code = getattr(fault, "sqlite_errorcode", sqlite3.SQLITE_CORRUPT) & 0xFF
            if code in (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB):
                self._throw_away(str(fault))
            elif code in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
                self._go_without("another run is using it")
            else:
                self._go_without(str(fault))
        except OSError as fault:
            self._go_without(fault.strerror or str(fault))
        return None

    def _go_without(self, why: str) -> None:
        self._drop_connection()
        self._say(f"the cache {self._path} is not used: {why}; everything is computed")

    def _throw_away(self, why: str) -> None:
        self._drop_connection()
        self._say(f"the cache {self._path} is thrown away, nothing in it is believed: {why}")
        try:
            for path in self._files():
                path.unlink(missing_ok=True)
            self._open()
        except (OSError, sqlite3.Error, _Damaged) as fault:
            self._go_without(str(fault))

    def _files(self) -> tuple[Path, ...]:
        if self._path is None:
            return ()
        return self._path, self._path.with_name(f"{self._path.name}-journal")

    # ------------------------------------------------------------ the file

    def _database(self) -> sqlite3.Connection:
        if self._connection is None:
            raise _Damaged("not open")
        return self._connection

    def _drop_connection(self) -> None:
        connection, self._connection = self._connection, None
        if connection is not None:
            connection.close()

    def _open(self) -> None:
        """Open the file for this run alone; what is written in it must be our table and nothing else."""
        if self._path is None:
            return
        self._path.parent.mkdir(parents=True, exist_ok=True)
        self._connection = sqlite3.connect(self._path, timeout=_WAIT_S, isolation_level=None)
        self._run("PRAGMA trusted_schema = OFF")
        self._run("PRAGMA cell_size_check = ON")
        self._run("PRAGMA locking_mode = EXCLUSIVE")
        self._run("PRAGMA auto_vacuum = FULL")
        self._run("PRAGMA journal_mode = DELETE")
        self._run("PRAGMA synchronous = OFF")  # what a power cut damages is noticed and thrown away
        self._run("BEGIN IMMEDIATE")
        found = self._run("SELECT type, sql FROM sqlite_master WHERE sql IS NOT NULL")
        application, form = self._number("application_id"), self._number("user_version")
        if not found and (application, form) == (0, 0):
            self._run(_SCHEMA)
            self._run(f"PRAGMA application_id = {_APPLICATION}")
            self._run(f"PRAGMA user_version = {_FORMAT}")
        elif (found, application, form) != ([("table", _SCHEMA)], _APPLICATION, _FORMAT):
            raise _Damaged("it is not one of ours")

    def _run(self, statement: str, values: Sequence[object] = ()) -> list[tuple[object, ...]]:
        return self._database().execute(statement, values).fetchall()

    def _number(self, pragma: str) -> object:
        return self._run(f"PRAGMA {pragma}")[0][0]

    # ------------------------------------------------------------ entries

    def _read(self, keys: Sequence[str]) -> dict[str, dict[str, object]]:
        found: dict[str, dict[str, object]] = defaultdict(dict)
        for some in _portions(keys):
            rows = self._run(f"SELECT key, content, mark, value, used FROM kept WHERE {_among(some)}", some)
            for key, content, mark, value, used in rows:
                if not (isinstance(key, str) and isinstance(content, str) and isinstance(value, bytes)):
                    raise _Damaged("an entry is of another type")
                if mark != _mark(key, content, value):
                    raise _Damaged("an entry does not fit its check value")
                found[key][content] = decode(value)
                if used != self._today:
                    self._met.append((key, content))
        return dict(found)

    def _present(self, keys: Sequence[str]) -> set[str]:
        rows = (self._run(f"SELECT key FROM kept WHERE {_among(some)}", some) for some in _portions(keys))
        return {str(key) for found in rows for (key,) in found}

    def _write(self, key: str, content: str, data: bytes) -> bool:
        row = (key, content, self._today, len(data), _mark(key, content, data), data)
        self._run("INSERT OR REPLACE INTO kept VALUES (?, ?, ?, ?, ?, ?)", row)
        self._waiting += 1
        if self._waiting >= PUTS_A_COMMIT:
            self._waiting = 0
            self._run("COMMIT")
            self._run("BEGIN IMMEDIATE")
        return True

    def _finish(self) -> None:
        self._database().executemany(
            "UPDATE kept SET used = ? WHERE key = ? AND content = ?",
            ((self._today, key, content) for key, content in self._met),
        )
        self._drop_oldest()
        self._run("COMMIT")

    def _drop_oldest(self) -> None:
        """Drop what was not used for longest until :data:`KEPT_SHARE` of the limit is left."""
        entries = self._run("SELECT rowid, size FROM kept ORDER BY used, rowid")
        sizes = [size if isinstance(size, int) else self._largest_bytes for _, size in entries]
        total = sum(sizes)
        if total <= self._largest_bytes:
            return
        dropped = []
        for (row, _), size in zip(entries, sizes):
            if total <= KEPT_SHARE * self._largest_bytes:
                break
            dropped.append((row,))
            total -= size
        self._database().executemany("DELETE FROM kept WHERE rowid = ?", dropped)


def _mark(key: str, content: str, data: bytes) -> bytes:
    """Return the check value of an entry: over its key, its content and its bytes."""
    said = hashlib.blake2b(f"{len(key)} {key}{content}\0".encode(), digest_size=16)
    said.update(data)
    return said.digest()


def _portions(keys: Sequence[str]) -> Iterator[Sequence[str]]:
    for start in range(0, len(keys), _KEYS_A_QUERY):
        yield keys[start : start + _KEYS_A_QUERY]


def _among(keys: Sequence[str]) -> str:
    return f"key IN ({', '.join('?' * len(keys))})"
