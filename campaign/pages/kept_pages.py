"""Pages as an earlier run made them, where everything that they are made from is the same.

They are told by a digest of that, of what all pages share, of the templates, of the program and of its
libraries. The digest is taken of the values alone: equal pages have equal digests, however they came about.
"""

from __future__ import annotations

import hashlib
import io
import pickle
import zlib
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from campaign.keeping.kept_site import PAGE_LIBRARIES
from campaign.keeping.program import digest_of, program_digest, versions_of
from campaign.keeping.store import Store

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
    """Finds and keeps what pages became, by all that they are made from.

    That may be one page that is to be rendered, or the share of a module of which its page and those of its
    sensors are made (:mod:`campaign.pages.module_share`): what is the same then need not be made either.

    Parameters
    ----------
    store
        Where it is kept; one that is not open finds and keeps nothing, and costs nothing.
    templates
        Folders of templates.
    shared
        What the making and the rendering of all of them see besides.
    """

    def __init__(self, store: Store, templates: Iterable[Path], shared: object) -> None:
        digest = digest_of_value(shared) if store.is_open else None
        self._store = store
        self._shared: str | None = None
        self._keys: dict[str, str] = {}
        if digest is not None:
            self._shared = digest_of(["pages", digest, *_what_renders(templates)])

    def find(self, slug: str, source: object) -> tuple[PageFiles, ...] | None:
        """Return what an earlier run made of the very same *source*, or ``None``; *slug*: its first page."""
        digest = digest_of_value(source) if self._shared is not None else None
        if self._shared is None or digest is None:
            return None
        key = digest_of([self._shared, digest])
        found = _unpacked(self._store.get(key))
        if found is None:
            self._keys[slug] = key
        return found

    def keep(self, made: Sequence[PageFiles]) -> None:
        """Keep what a source became that was looked for and not found."""
        key = self._keys.pop(made[0].slug, None) if made else None
        if key is not None:
            self._store.put(key, [_packed(page) for page in made])


def digest_of_value(value: object) -> bytes | None:
    """Return a digest of a value and of all that it holds, ``None`` where it holds what has no name.

    Equal values have equal digests whether or not parts of them are one object, and however the memory of
    their arrays and tables is laid out; but sets are taken in the order that they have in this process (the
    writer of the standard library asks nobody about them), so that what holds one may be made anew though it
    is equal, and is never found wrongly. The bytes that are hashed are never read back.
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
}
"""What is written by its values alone, and not as its library would."""


def _what_renders(templates: Iterable[Path]) -> list[str | bytes]:
    """Return what tells the program, its libraries and the templates that pages are rendered by."""
    return [program_digest(), versions_of(PAGE_LIBRARIES), *_contents(templates)]


def _contents(folders: Iterable[Path]) -> list[bytes]:
    files = [(folder, path) for folder in folders for path in sorted(folder.rglob("*")) if path.is_file()]
    return [
        part for folder, path in files for part in (str(path.relative_to(folder)).encode(), path.read_bytes())
    ]


def _packed(made: PageFiles) -> list[object]:
    further = {name: zlib.compress(data, _QUICK) for name, data in made.further.items()}
    return [made.slug, made.file, zlib.compress(made.html.encode(), _QUICK), further]


def _unpacked(found: object) -> tuple[PageFiles, ...] | None:
    """Return the pages that were kept; ``None`` for anything else."""
    if not (isinstance(found, list) and found):
        return None
    if not all(isinstance(page, list) and len(page) == 4 for page in found):
        return None
    return tuple(
        PageFiles(
            slug,
            file,
            zlib.decompress(text).decode(),
            {name: zlib.decompress(data) for name, data in further.items()},
        )
        for slug, file, text, further in found
    )
