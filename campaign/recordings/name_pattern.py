"""Patterns of recording names, ``{module}_{sensor}_{kind}_r{repetition}``: what a name says of its trial."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import islice

KEYS = (
    "module",
    "sensor",
    "kind",
    "repetition",
    "session",
    "generation",
    "batch",
    "length",
    "pressure",
    "rate",
    "temperature",
    "ignore",
)
"""Keys that a pattern may hold."""

SET_POINTS = ("length", "pressure", "rate", "temperature")
"""Keys that name a condition of the run, as ``120mm`` does."""

MOST_READINGS = 1000
"""Ways of reading one name that are looked at."""

_SET_POINT = re.compile(r"[+-]?\d+(?:[.,]\d+)?\s?[^\W\d_]*(?:[%°/][^\W\d_]*)*")


class PatternError(ValueError):
    """A pattern that cannot be used; the text says why."""


@dataclass(frozen=True)
class NamePattern:
    """One pattern of ``[recordings] name``, taken apart.

    Attributes
    ----------
    text
        The pattern as written.
    parts
        Pairs of (is a key, text) in order.
    """

    text: str
    parts: tuple[tuple[bool, str], ...]

    @property
    def whole_path(self) -> bool:
        """Whether the pattern is for the whole relative path rather than the name alone."""
        return "/" in self.text

    @property
    def keys(self) -> tuple[str, ...]:
        """Keys that the pattern holds, in order."""
        return tuple(text for is_key, text in self.parts if is_key)


@dataclass(frozen=True)
class NameReading:
    """What the patterns make of one name.

    Attributes
    ----------
    pattern
        The first pattern that matches; ``None`` where none does.
    values
        What the name says by key (``ignore`` left out); empty where it says nothing or is ambiguous.
    ambiguous
        Two readings of the name that differ; empty where there is one.
    """

    pattern: str | None
    values: dict[str, str]
    ambiguous: tuple[dict[str, str], ...] = ()


def compile_pattern(text: str) -> NamePattern:
    """Take a pattern apart.

    Raises
    ------
    PatternError
        Where a brace is not paired, a key is unknown or the pattern holds no key.
    """
    parts: list[tuple[bool, str]] = []
    for piece in re.split(r"(\{[^{}]*\})", text):
        if piece.startswith("{") and piece.endswith("}"):
            if piece[1:-1] not in KEYS:
                raise PatternError(piece[1:-1])
            parts.append((True, piece[1:-1]))
        elif "{" in piece or "}" in piece:
            raise PatternError("{" if "{" in piece else "}")
        elif piece:
            parts.append((False, piece))
    if not any(is_key for is_key, _ in parts):
        raise PatternError("")
    return NamePattern(text, tuple(parts))


def text_to_match(pattern: NamePattern, file: str) -> str:
    """Return what a pattern is held against: name or path, without its ending unless it spells one."""
    text = file if pattern.whole_path else file.rsplit("/", 1)[-1]
    is_key, last = pattern.parts[-1]
    spells_ending = not is_key and re.search(r"\.\w+$", last) is not None
    return text if spells_ending else re.sub(r"(?<=[^/])\.[^./]*$", "", text)


def read_name(file: str, patterns: Sequence[NamePattern], kinds: Sequence[str]) -> NameReading:
    """Read a recording's name by the first pattern that matches.

    Parameters
    ----------
    file
        Path from the campaign folder with forward slashes.
    patterns
        Patterns in falling order.
    kinds
        Words that stand for a kind of trial: ours and the lab's own.

    Returns
    -------
    NameReading
        ``{kind}`` takes known words first; only where no pattern matches with one is any word taken, so that
        an unknown word can be named.
    """
    for known in (frozenset(kinds), None):
        for pattern in patterns:
            found = distinct_readings(pattern, text_to_match(pattern, file), known)
            if len(found) == 1:
                return NameReading(pattern.text, found[0])
            if found:
                return NameReading(pattern.text, {}, tuple(found[:2]))
    return NameReading(None, {})


def distinct_readings(pattern: NamePattern, text: str, kinds: frozenset[str] | None) -> list[dict[str, str]]:
    """Return the readings of a text that differ in what they say, at most a few."""
    distinct: list[dict[str, str]] = []
    for values in _readings(pattern, text, kinds):
        if values not in distinct:
            distinct.append(values)
        if len(distinct) > 1:
            break
    return distinct


def _readings(pattern: NamePattern, text: str, kinds: frozenset[str] | None) -> Iterator[dict[str, str]]:
    """Yield every reading in which a key that stands twice says the same twice."""
    dead: set[tuple[int, int]] = set()
    for values in islice(_walk(pattern.parts, text, 0, 0, kinds, dead), MOST_READINGS):
        said: dict[str, str] = {}
        if all(said.setdefault(key, value) == value for key, value in values if key != "ignore"):
            yield said


def _walk(
    parts: tuple[tuple[bool, str], ...],
    text: str,
    part: int,
    at: int,
    kinds: frozenset[str] | None,
    dead: set[tuple[int, int]],
) -> Iterator[list[tuple[str, str]]]:
    """Yield the ways to read *text* from *at* by the parts from *part*; dead ends are met once."""
    if part == len(parts):
        if at == len(text):
            yield []
        return
    if (part, at) in dead:
        return
    alive = False
    is_key, word = parts[part]
    ends = _ends_of_value(parts, text, part, at) if is_key else _end_of_literal(text, word, at)
    for end in ends:
        value = text[at:end]
        if is_key and not _fits(word, value, kinds):
            continue
        for rest in _walk(parts, text, part + 1, end, kinds, dead):
            alive = True
            yield [(word, value), *rest] if is_key else rest
    if not alive:
        dead.add((part, at))


def _end_of_literal(text: str, word: str, at: int) -> Iterator[int]:
    if text.startswith(word, at):
        yield at + len(word)


def _ends_of_value(parts: tuple[tuple[bool, str], ...], text: str, part: int, at: int) -> Iterator[int]:
    """Yield where a value that begins at *at* may end: before the next literal, never past a slash."""
    limit = text.find("/", at)
    limit = len(text) if limit < 0 else limit
    if part + 1 == len(parts):
        if limit == len(text) > at:
            yield limit
        return
    next_is_key, literal = parts[part + 1]
    if next_is_key:
        yield from range(at + 1, limit + 1)
        return
    end = text.find(literal, at + 1, limit + len(literal))
    while end >= 0:
        yield end
        end = text.find(literal, end + 1, limit + len(literal))


def _fits(key: str, value: str, kinds: frozenset[str] | None) -> bool:
    if key == "repetition":
        return value.isascii() and value.isdigit()
    if key in SET_POINTS:
        return _SET_POINT.fullmatch(value) is not None
    if key == "kind" and kinds is not None:
        return value in kinds or value.lower() in kinds
    return True


def same_reading(first: Mapping[str, str], second: Mapping[str, str]) -> tuple[str, ...]:
    """Return the keys in which two readings differ."""
    return tuple(sorted(k for k in {*first, *second} if first.get(k) != second.get(k)))
