"""Guesses at what the parts of recording names mean, for a first description that a person looks over."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from campaign.recordings.description import KINDS
from campaign.units import FAMILIES

WORDS_OF_KINDS: dict[str, tuple[str, ...]] = {
    "staircase": ("cal", "calib", "calibration", "step", "steps", "stair", "stairs", "static", "quasistatic"),
    "cyclic": ("cyc", "cycle", "cycles", "cycling", "loop", "loops", "hysteresis", "dynamic"),
    "hold": ("creep", "relax", "relaxation", "drift", "stability", "dwell"),
    "pressure": ("press", "inflate", "inflation", "pneu"),
    "layout": ("pose", "poses", "shape", "placement", "placements"),
    "offaxis": ("transverse", "cross", "lateral"),
    "thermal": ("temp", "temperature", "heat", "heating"),
    "endurance": ("fatigue", "life", "lifetime", "durability", "longterm"),
    "contact": ("touch", "tap"),
    "proximity": ("prox", "hand"),
    "bend": ("bending", "curve", "curvature"),
    "blank": ("open", "parasitic", "dummy", "empty"),
}
"""Words that labs use for our kinds of trial."""

_REPETITION = re.compile(r"(?P<lead>r|R|rep|Rep|run|Run|trial|Trial|n|N|#)?0*(?P<number>\d{1,3})")
_SESSION = re.compile(r"(?P<lead>s|ses|session|day|mount)\d{1,3}")
_DATE = re.compile(r"(19|20)\d{6}|\d{4}-\d{2}-\d{2}")
_MODULE = re.compile(r"[A-Za-z]+-?\d+[A-Za-z]?")


@dataclass(frozen=True)
class NameGuess:
    """A guessed pattern, and what it was guessed from.

    Attributes
    ----------
    pattern
        Such as ``{module}_{sensor}_{kind}_r{repetition}``.
    example
        A name that it reads.
    matched, names
        How many of how many names have this shape.
    kinds
        Words under ``{kind}``, with our kind, ``None`` where it cannot be guessed.
    """

    pattern: str
    example: str
    matched: int
    names: int
    kinds: tuple[tuple[str, str | None], ...] = ()

    @property
    def keys(self) -> tuple[str, ...]:
        """Keys of the pattern."""
        return tuple(re.findall(r"\{(\w+)\}", self.pattern))


def kind_of_word(word: str) -> str | None:
    """Return the kind of trial that a word of a lab probably stands for, or ``None``."""
    plain = word.lower()
    if plain in KINDS:
        return plain
    return next((kind for kind, words in WORDS_OF_KINDS.items() if plain in words), None)


def guess_pattern(files: Sequence[str]) -> NameGuess | None:
    """Guess what the parts of recording names mean.

    Parameters
    ----------
    files
        Paths from the campaign folder with forward slashes.

    Returns
    -------
    NameGuess or None
        For the commonest shape among the names; ``None`` where nothing can be guessed or there is one name.
    """
    if len(files) < 2:
        return None
    stems = [re.sub(r"\.[^.]*$", "", file.rsplit("/", 1)[-1]) for file in files]
    separator = max("_- ", key=lambda mark: sum(mark in stem for stem in stems))
    shapes = Counter(stem.count(separator) for stem in stems)
    commonest = shapes.most_common(1)[0][0]
    chosen = [stem for stem in stems if stem.count(separator) == commonest]
    columns = list(zip(*(stem.split(separator) for stem in chosen), strict=True))
    parts = _parts(columns)
    pattern = separator.join(parts)
    if all(key == "ignore" for key in re.findall(r"\{(\w+)\}", pattern)):
        return None
    words = sorted(set(columns[parts.index("{kind}")])) if "{kind}" in parts else []
    kinds = tuple((word, kind_of_word(word)) for word in words)
    return NameGuess(pattern, chosen[0], len(chosen), len(files), kinds)


def _parts(columns: Sequence[tuple[str, ...]]) -> list[str]:
    """Give each part of the names a key: what its look tells first, module and sensor by order."""
    parts: list[str] = [""] * len(columns)
    used: set[str] = set()
    for key, find in _LOOKS:
        for place in _places(key, len(columns)):
            if not parts[place] and key not in used and (part := find(columns[place])) is not None:
                parts[place] = part
                used.add(key)
    for key in ("module", "sensor"):
        free = [place for place, part in enumerate(parts) if not part and _is_id(columns[place])]
        if free:
            parts[free[0]] = f"{{{key}}}"
    return [part or "{ignore}" for part in parts]


def _places(key: str, count: int) -> range:
    """Repetitions and sessions stand at the end as a rule, the others are looked for from the front."""
    return range(count - 1, -1, -1) if key in ("repetition", "session") else range(count)


def _is_id(values: Sequence[str]) -> bool:
    return all(values) and not all(_DATE.fullmatch(value) for value in values)


def _find_kind(values: Sequence[str]) -> str | None:
    known = sum(kind_of_word(value) is not None for value in values)
    return "{kind}" if known * 2 > len(values) else None


def _find_set_point(family: str) -> Callable[[Sequence[str]], str | None]:
    units = "|".join(sorted(map(re.escape, FAMILIES[family].scales), key=len, reverse=True))
    expression = re.compile(rf"[+-]?\d+(?:[.,]\d+)?\s?(?:{units})")
    return lambda values: f"{{{family}}}" if all(expression.fullmatch(v) for v in values) else None


def _find_led(expression: re.Pattern[str], key: str) -> Callable[[Sequence[str]], str | None]:
    def find(values: Sequence[str]) -> str | None:
        found = [expression.fullmatch(value) for value in values]
        leads = {match["lead"] or "" for match in found if match is not None}
        if None in found or len(leads) != 1:
            return None
        return f"{leads.pop()}{{{key}}}"

    return find


_LOOKS: tuple[tuple[str, Callable[[Sequence[str]], str | None]], ...] = (
    ("kind", _find_kind),
    ("length", _find_set_point("length")),
    ("pressure", _find_set_point("pressure")),
    ("session", _find_led(_SESSION, "session")),
    ("repetition", _find_led(_REPETITION, "repetition")),
)
