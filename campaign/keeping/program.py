"""Which program this is: a digest that changes with its sources and with the libraries that compute."""

from __future__ import annotations

import hashlib
import sys
from collections.abc import Iterable
from functools import lru_cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import campaign

LIBRARIES = ("numpy", "pandas", "scipy", "statsmodels")
"""Libraries whose version may change a number."""


@lru_cache(maxsize=1)
def program_digest() -> str:
    """Return a digest of our sources, of Python and of the libraries that compute.

    What was kept by another program is never taken for this one's: a result is kept under a key that begins
    with this digest.
    """
    said = hashlib.sha256(f"{campaign.__version__} {sys.version}".encode())
    said.update(f" {versions_of(LIBRARIES)}".encode())
    root = Path(campaign.__file__).parent
    for file in sorted(root.rglob("*.py")):
        said.update(file.relative_to(root).as_posix().encode() + b"\0" + file.read_bytes())
    return said.hexdigest()


def digest_of(parts: Iterable[str | bytes]) -> str:
    """Return one digest of several texts or bytes; where one ends and the next begins counts, too."""
    said = hashlib.sha256()
    for part in parts:
        data = part.encode() if isinstance(part, str) else part
        said.update(len(data).to_bytes(8, "little") + data)
    return said.hexdigest()


def versions_of(libraries: Iterable[str]) -> str:
    """Return names and versions of libraries as one text."""
    return " ".join(f"{name} {_version_of(name)}" for name in libraries)


def _version_of(library: str) -> str:
    try:
        return version(library)
    except PackageNotFoundError:
        return "not there"
