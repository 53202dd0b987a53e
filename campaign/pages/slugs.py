"""Ids of modules, sensors, trials and notes as names of files and anchors.

An id may be anything that a lab writes: spaces, another script, ``../``, two that differ in case only. A
plain id (capitals, digits and underscores) stands as it is; any other becomes its readable letters in lower
case and six letters of its hash, so that no two ids share a name, not even on a disk that ignores case, and
no name leaves the folder.
"""

from __future__ import annotations

import hashlib
import re
import unicodedata
from functools import lru_cache

_PLAIN = re.compile(r"[A-Z0-9][A-Z0-9_]{0,31}")
_LETTERS = "bcdfghjklmnpqrst"


@lru_cache(maxsize=100_000)
def slug(text: str) -> str:
    """Return *text* as part of a file name: letters, digits and underscores of ASCII, never empty."""
    if _PLAIN.fullmatch(text):
        return text
    folded = unicodedata.normalize("NFKD", text).encode("ascii", "ignore").decode("ascii").lower()
    readable = re.sub(r"[^a-z0-9]+", "_", folded).strip("_")[:32].strip("_")
    return f"{readable}_{_mark(text)}" if readable else _mark(text)


def module_slug(module: str) -> str:
    """Return the name of a module's page, without its ending."""
    return f"module-{slug(module)}"


def sensor_slug(module: str, sensor: str) -> str:
    """Return the name of a sensor's page, without its ending."""
    return f"sensor-{slug(module)}-{slug(sensor)}"


def note_slug(name: str) -> str:
    """Return the name of a note's page, without its ending."""
    return f"note-{slug(name)}"


def trial_anchor(trial: str) -> str:
    """Return the anchor of a trial (the recording's path) on its sensor's or module's page."""
    return f"trial-{slug(trial)}"


def module_href(module: str) -> str:
    """Return the link to a module's page."""
    return f"{module_slug(module)}.html"


def sensor_href(module: str, sensor: str) -> str:
    """Return the link to a sensor's page."""
    return f"{sensor_slug(module, sensor)}.html"


def trial_href(module: str, sensor: str, trial: str) -> str:
    """Return the link to a trial's section on its sensor's page."""
    return f"{sensor_href(module, sensor)}#{trial_anchor(trial)}"


def _mark(text: str) -> str:
    digest = hashlib.sha256(text.encode("utf-8", "surrogatepass")).digest()
    return "".join(_LETTERS[byte % 16] for byte in digest[:6])
