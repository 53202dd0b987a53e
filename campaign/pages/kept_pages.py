"""Pages as an earlier run rendered them, where everything that the rendering sees is the same.

A page is told by a digest of itself, of what all pages share, of the templates, of the program and of its
libraries. The digest is taken of the values alone: equal pages have equal digests, however they came about.
"""

from __future__ import annotations

import hashlib
import io
import pickle
import zlib
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from campaign.keeping.kept_site import PAGE_LIBRARIES
from campaign.keeping.program import digest_of, program_digest, versions_of
from campaign.keeping.store import Store
from campaign.pages.page import Page

_QUICK = 1
"""Level of compression."""


@dataclass(frozen=True)
class PageFiles:
    """What one page became: its text, and its data script and its figures' CSV files by address.

    Links to anchors of a page that is told in parts are not led there yet.
    """

    slug: str
    file: str
    html: str
    further: dict[str, bytes]


class KeptPages:
    """Finds and keeps what pages became.

    Parameters
    ----------
    store
        Where it is kept; one that is not open finds and keeps nothing, and costs nothing.
    templates
        Folders of templates.
    shared
        What the rendering of every page sees besides the page.
    """

    def __init__(self, store: Store, templates: Iterable[Path], shared: object) -> None:
        digest = digest_of_value(shared) if store.is_open else None
        self._store = store
        self._shared = None
        self._keys: dict[str, str] = {}
        if digest is not None:
            self._shared = digest_of(["page", digest, *what_renders(templates)])

    def find(self, page: Page) -> PageFiles | None:
        """Return what an earlier run made of the very same page, or ``None``."""
        digest = digest_of_value(page) if self._shared is not None else None
        if self._shared is None or digest is None:
            return None
        key = digest_of([self._shared, digest])
        found = self._store.get(key)
        if found is None:
            self._keys[page.slug] = key
        return unpacked(found)

    def keep(self, made: PageFiles) -> None:
        """Keep what a page became that was looked for and not found."""
        key = self._keys.pop(made.slug, None)
        if key is not None:
            self._store.put(key, packed(made))


def digest_of_value(value: object) -> bytes | None:
    """Return a digest of a value and of all that it holds, ``None`` where it holds what has no name.

    Equal values have equal digests whether or not parts of them are one object, and however the memory of
    their arrays and tables is laid out. The bytes that are hashed are never read back.
    """
    said = _Said()
    try:
        _Writer(said).dump(value)
    except (pickle.PicklingError, AttributeError, TypeError, ValueError, RecursionError):
        return None
    return said.digest()


class _Said(io.RawIOBase):
    """Takes what is written into a hash and keeps none of it."""

    def __init__(self) -> None:
        self._hash = hashlib.blake2b(digest_size=32)

    def write(self, data: Any) -> int:
        self._hash.update(data)
        return len(data)

    def digest(self) -> bytes:
        return self._hash.digest()


class _Writer(pickle.Pickler):
    """Writes values without references to what was written before, so that only what is equal counts."""

    def __init__(self, said: _Said) -> None:
        super().__init__(said, protocol=5)
        self.fast = True

    def reducer_override(self, value: Any) -> Any:
        named = _NAMED.get(type(value))
        return NotImplemented if named is None else (_nothing, named(value))


def _nothing(*_: object) -> None:
    """Stands where something would be made; what is hashed is never read."""


def _array(array: np.ndarray[Any, Any]) -> tuple[object, ...]:
    held = array.ravel().tolist() if array.dtype.hasobject else array.tobytes()
    return "array", array.dtype.str, array.shape, held


def _column(column: pd.Series[Any]) -> tuple[object, ...]:
    """Return the type of a column and its values."""
    if isinstance(column.dtype, np.dtype):
        return _array(column.to_numpy())
    return "column", str(column.dtype), column.array.tolist()


def _table(table: pd.DataFrame) -> tuple[object, ...]:
    columns: list[object] = [_column(column) for _, column in table.items()]
    return "table", table.index, table.columns, columns


def _index(index: pd.Index[Any]) -> tuple[object, ...]:
    return "index", str(index.dtype), tuple(index.names), index.tolist()


_NAMED: dict[type, Callable[[Any], tuple[object, ...]]] = {
    np.ndarray: _array,
    pd.DataFrame: _table,
    pd.Series: lambda series: ("series", series.index, series.name, _column(series)),
    pd.Index: _index,
    pd.MultiIndex: lambda index: ("levels", tuple(index.names), index.tolist()),
    pd.RangeIndex: lambda index: ("range", index.name, index.start, index.stop, index.step),
    set: lambda values: ("set", sorted(values, key=repr)),
    frozenset: lambda values: ("frozenset", sorted(values, key=repr)),
}
"""What is written by its values alone, and not as its library would."""


def what_renders(templates: Iterable[Path]) -> list[str | bytes]:
    """Return what tells the program, its libraries and the templates that pages are rendered by."""
    return [program_digest(), versions_of(PAGE_LIBRARIES), *_contents(templates)]


def _contents(folders: Iterable[Path]) -> list[bytes]:
    files = [(folder, path) for folder in folders for path in sorted(folder.rglob("*")) if path.is_file()]
    return [
        part for folder, path in files for part in (str(path.relative_to(folder)).encode(), path.read_bytes())
    ]


def packed(made: PageFiles) -> list[object]:
    """Return what a page became as values that the store writes."""
    further = {name: zlib.compress(data, _QUICK) for name, data in made.further.items()}
    return [made.slug, made.file, zlib.compress(made.html.encode(), _QUICK), further]


def unpacked(found: object) -> PageFiles | None:
    """Return what :func:`packed` was given; ``None`` for anything else."""
    if not (isinstance(found, list) and len(found) == 4):
        return None
    slug, file, text, held = found
    further = {name: zlib.decompress(data) for name, data in held.items()}
    return PageFiles(slug, file, zlib.decompress(text).decode(), further)
