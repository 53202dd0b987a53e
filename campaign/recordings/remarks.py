"""Occurrences met while reading a file, and the notices they are gathered into."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from campaign.notices import Notice, Weight


@dataclass(frozen=True)
class Remark:
    """One thing met at one place of a file.

    Attributes
    ----------
    code
        A key of ``NOTICE_CODES``.
    line, column
        From 1; ``None`` where no place is meant.
    text
        What stands there in the file.
    words
        What to say instead of showing the text.
    count
        How many occurrences it already stands for.
    """

    code: str
    line: int | None
    column: int | None = None
    text: str = ""
    count: int = 1
    words: str = ""


@dataclass(frozen=True)
class _Wording:
    """How the remarks of one code are worded; ``{n}`` is their number, ``{texts}`` what stands there."""

    weight: Weight
    one: str
    many: str
    done: str
    remedy: str = ""
    by_column: bool = False
    shows: int = 3


SET_ASIDE = "the file is not used"
"""What is done about a notice that sets a file aside."""

_DROPPED = "dropped, counted"
_MISSING = "taken as missing, counted"

_WORDINGS: dict[str, _Wording] = {
    "nul": _Wording(
        "noted",
        "a line holds NUL bytes",
        "{n} lines hold NUL bytes",
        _DROPPED,
        "see whether the disk was full",
    ),
    "blank-line": _Wording(
        "noted", "a line without values", "{n} lines without values", "passed over", shows=0
    ),
    "comment-line": _Wording(
        "noted",
        "a comment between the rows: {texts}",
        "{n} comments between the rows: {texts}",
        "passed over",
    ),
    "repeated-header": _Wording(
        "noted",
        "the header is repeated",
        "the header is repeated {n} times",
        "passed over; the logger may have been restarted here",
        shows=0,
    ),
    "footer": _Wording(
        "noted",
        "a line of words after the last row: {texts}",
        "{n} lines of words after the last row: {texts}",
        "passed over",
        shows=10,
    ),
    "ragged": _Wording(
        "noted",
        "a row with the wrong number of fields: {texts}",
        "{n} rows with the wrong number of fields, the first: {texts}",
        "dropped, counted; nothing is filled or shifted",
        "see what the recording lost there",
        shows=1,
    ),
    "truncated": _Wording(
        "noted",
        "the last line is cut short: {texts}",
        "{n} lines are cut short: {texts}",
        _DROPPED,
        "export the recording again",
    ),
    "no-final-newline": _Wording(
        "noted", "the last line has no line end but is as long as its neighbours", "", "kept", shows=0
    ),
    "quote": _Wording(
        "set aside",
        "a quotation mark is not closed on its line, or text follows it",
        "{n} lines with a quotation mark that is not closed, or text after it",
        SET_ASIDE,
        "close the quotation mark; a field must not go over a line's end",
        shows=0,
    ),
    "field-length": _Wording(
        "set aside",
        "a field is far too long for a number: {texts}",
        "{n} fields far too long for numbers: {texts}",
        SET_ASIDE,
        "export the recording again",
        True,
        1,
    ),
    "number": _Wording(
        "set aside",
        "not a plain decimal number: {texts}",
        "{n} fields are not plain decimal numbers: {texts}",
        SET_ASIDE,
        'correct it; if it stands for no value, name it in missing = ["…"] of its [[columns]]; '
        "marks of thousands and timestamps must be declared there",
        True,
    ),
    "missing-token": _Wording(
        "noted", "a value is missing: {texts}", "{n} values are missing: {texts}", _MISSING, "", True
    ),
    "overrange": _Wording(
        "noted",
        "a value beyond the instrument's range: {texts}",
        "{n} values beyond the instrument's range: {texts}",
        "taken as missing, counted apart: such values are not lost at random",
        "measure with a wider range",
        True,
    ),
    "non-finite": _Wording(
        "noted",
        "infinity is not a measurement: {texts}",
        "{n} infinities are not measurements: {texts}",
        _MISSING,
        "",
        True,
    ),
    "sentinel": _Wording(
        "noted",
        "a value beyond anything physical: {texts}",
        "{n} values beyond anything physical: {texts}",
        _MISSING,
        "",
        True,
    ),
    "suspect-sentinel": _Wording(
        "noted",
        "a value that instruments use for 'no value', far from all others: {texts}",
        "{n} values that instruments use for 'no value', far from all others: {texts}",
        "kept as read",
        'if it stands for no value, name it in missing = ["…"] of its [[columns]]',
        True,
    ),
    "time-order": _Wording(
        "noted",
        "time runs backwards: {texts}",
        "time runs backwards {n} times, first: {texts}",
        "the order of the file is kept; figures that need time are withheld",
        "see whether two runs were joined",
        True,
        1,
    ),
    "time-resolution": _Wording(
        "noted",
        "a time repeats with other values",
        "{n} times repeat with other values",
        "kept as read; the clock is coarser than the sampling",
        "",
        True,
        0,
    ),
    "duplicate-row": _Wording(
        "noted",
        "a row repeats the one before in every value",
        "{n} rows repeat the one before in every value",
        "kept",
        "",
        False,
        0,
    ),
    "stuck": _Wording(
        "noted",
        "the signal repeats to the last digit while the reference moves: {texts}",
        "the signal repeats to the last digit while the reference moves: {texts}",
        "kept as read",
        "look at the connection; if the sensor is dead, say so in sensors.csv",
        True,
        1,
    ),
    "clock-unit": _Wording(
        "noted",
        "the header says {texts}, but the values look like seconds since 1970",
        "",
        "read in the unit of the header",
        'if they are seconds, say unit = "s" in [[columns]]',
        True,
        1,
    ),
    "mixed-identity": _Wording(
        "set aside",
        "the column that should name one trial holds several values: {texts}",
        "columns that should name one trial hold several values: {texts}",
        SET_ASIDE,
        'split the file, or give the column quantity = "ignore"',
        True,
        1,
    ),
    "no-rows": _Wording(
        "set aside",
        "no row can be read {texts}",
        "",
        SET_ASIDE,
        "record or export it again",
        shows=1,
    ),
}


def shown(text: str, longest: int = 60) -> str:
    """Return text from a file as a notice may show it: control characters escaped, cut to *longest*."""
    cut = text if len(text) <= longest else text[:longest] + "…"
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in cut)


def set_aside(code: str, line: int | None, column: int | None, what: str, remedy: str) -> Notice:
    """Return the notice that sets a file aside, without the file's name."""
    return Notice(code, "set aside", None, line, column, what, SET_ASIDE, remedy)


def noted(
    code: str, line: int | None, column: int | None, what: str, done: str, remedy: str = "", count: int = 1
) -> Notice:
    """Return a notice of weight "noted", without the file's name."""
    return Notice(code, "noted", None, line, column, what, done, remedy, count)


def gather_remarks(remarks: Iterable[Remark]) -> tuple[Notice, ...]:
    """Return one notice a code (and column, where values are meant), at the first place, with the count.

    Remarks of one code and column may come in any order; the first in the file is the one that is placed.
    """
    groups: dict[tuple[str, int | None], list[Remark]] = {}
    for remark in remarks:
        key = (remark.code, remark.column if _WORDINGS[remark.code].by_column else None)
        groups.setdefault(key, []).append(remark)
    return tuple(_notice(sorted(group, key=_place)) for group in groups.values())


def _place(remark: Remark) -> tuple[int, int]:
    return remark.line or 0, remark.column or 0


def _notice(group: list[Remark]) -> Notice:
    first, wording = group[0], _WORDINGS[group[0].code]
    count = sum(remark.count for remark in group)
    texts = list(dict.fromkeys(remark.words or shown_quoted(remark.text) for remark in group))
    listed = ", ".join(texts[: wording.shows]) + (", …" if len(texts) > wording.shows > 1 else "")
    pattern = wording.one if count == 1 or not wording.many else wording.many
    what = pattern.format(n=count, texts=listed)
    return Notice(
        first.code, wording.weight, None, first.line, first.column, what, wording.done, wording.remedy, count
    )


def shown_quoted(text: str) -> str:
    """Return text from a file in quotation marks, an empty field in words."""
    return f"'{shown(text)}'" if text.strip() else "an empty field"
