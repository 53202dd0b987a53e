r"""Tables for a paper: plain LaTeX with the rules of ``booktabs``, rounded as on the page.

Every character that LaTeX takes for a command is written so that it stands for itself; signs that older
engines do not know are written as mathematics. A long table is a ``longtable`` and holds :data:`MOST_ROWS`
rows at most. Heads are broken into lines, long texts into paragraphs, and letters become smaller, until a
table fits the width of a page as far as that goes (class ``article``, A4: 345 pt).
"""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass

from campaign.pages.tables import Cell, Column, Table, shown_cells

LONG_FROM = 40
"""So many rows make a table that breaks over pages."""
MOST_ROWS = 200

_COMMANDS = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "#": r"\#",
    "_": r"\_",
    "%": r"\%",
    "^": r"\textasciicircum{}",
    "~": r"\textasciitilde{}",
    "<": r"\textless{}",
    ">": r"\textgreater{}",
    "|": r"\textbar{}",
    '"': r"\textquotedbl{}",
    "`": r"\textasciigrave{}",
}
_SPACES = {"\u202f": r"\,", "\u2009": r"\,", "\u00a0": "~", "\u2007": r"\phantom{0}", "\u2011": "-"}
_MARKS = {
    "–": "--",
    "—": "---",
    "‘": "`",
    "’": "'",
    "“": "``",
    "”": "''",
    "…": r"\ldots{}",
}
_MATHEMATICS = {
    "−": "-",
    "±": r"\pm",
    "×": r"\times",
    "·": r"\cdot",
    "÷": r"\div",
    "≤": r"\le",
    "≥": r"\ge",
    "≈": r"\approx",
    "→": r"\to",
    "√": r"\surd",
    "∞": r"\infty",
    "°": r"^\circ",
    "′": r"'",
    "Δ": r"\Delta",
    "Ω": r"\Omega",
    "α": r"\alpha",
    "β": r"\beta",
    "ε": r"\varepsilon",
    "λ": r"\lambda",
    "µ": r"\mu",
    "μ": r"\mu",
    "σ": r"\sigma",
    "τ": r"\tau",
    "χ": r"\chi",
}
_RAISED = dict(zip("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-", strict=True))
_LOWERED = dict(zip("₀₁₂₃₄₅₆₇₈₉", "0123456789", strict=True))
_WITHOUT_MEANING = ("Cc", "Cf", "Cs", "Co", "Cn")


def latex_table(table: Table, place: str = "") -> str:
    """Return a table as LaTeX, as its page shows it.

    Parameters
    ----------
    table
        Cells are rounded as on the page; an uncertainty or an interval stands beside its value.
    place
        Where the table comes from, for a comment at the top.

    Returns
    -------
    str
        A ``table`` with a ``tabular``, or a ``longtable``, with caption, label and rules; it needs the
        package ``booktabs`` (and ``longtable``).
    """
    rows = shown_cells(table)[:MOST_ROWS]
    long = len(rows) > LONG_FROM
    shape = _shape_of(table.columns, rows)
    packages = ["booktabs", *["array"] * ("p{" in shape.columns), *["longtable"] * long]
    needed = " ".join(rf"\usepackage{{{package}}}" for package in packages)
    notes = [f"% {_in_one_line(place)}"] if place else []
    notes.append(f"% {needed}")
    if len(rows) < len(table.frame):
        notes.append(f"% The first {len(rows)} of {len(table.frame)} rows; the CSV file holds all of them.")
    if shape.is_wide:
        notes.append(
            "% Wider than a page of article in these letters: set it sideways, or leave columns out."
        )
    body = [_row(cells) for cells in rows]
    caption, label = rf"\caption{{{escaped(table.caption)}}}", rf"\label{{tab:{_label(table.name)}}}"
    lines = _long(shape, caption, label, body) if long else _short(shape, caption, label, body)
    return "\n".join([*notes, *lines]) + "\n"


def escaped(text: str) -> str:
    """Return *text* so that LaTeX sets it as it is; characters that cannot be seen are left out."""
    return "".join(map(_one, text))


def _one(character: str) -> str:
    if character in _COMMANDS:
        return _COMMANDS[character]
    if character in _SPACES:
        return _SPACES[character]
    if character in _MARKS:
        return _MARKS[character]
    if character in _MATHEMATICS:
        return f"${_MATHEMATICS[character]}$"
    if character in _RAISED:
        return f"$^{{{_RAISED[character]}}}$"
    if character in _LOWERED:
        return f"$_{{{_LOWERED[character]}}}$"
    if character.isspace():
        return " "
    return "" if unicodedata.category(character) in _WITHOUT_MEANING else character


def _row(cells: list[Cell]) -> str:
    return " & ".join(_cell(cell) for cell in cells) + r" \\"


def _cell(cell: Cell) -> str:
    """Return a cell; one that begins with a bracket is guarded: a row's end takes brackets for itself."""
    text = escaped(cell.text)
    return f"{{}}{text}" if text.startswith(("[", "*")) else text


@dataclass(frozen=True)
class _Shape:
    """How a table is set: types of columns, lines of heads, size of letters, whether it is still too wide."""

    columns: str
    heads: tuple[str, ...]
    size: str
    is_wide: bool


_SIZES = (
    ("", 62),
    (r"\small\setlength{\tabcolsep}{4pt}", 72),
    (r"\scriptsize\setlength{\tabcolsep}{3pt}", 90),
)
"""Sizes of letters, and so many characters with the space between columns fill a line of 345 pt."""
_BETWEEN, _LONG_TEXT = 2.0, 18
"""Characters that the space between columns takes; texts longer than so many may become paragraphs."""
_CHARACTER_EM = 0.5
"""Mean width of a character over the size of letters."""


def _shape_of(columns: Sequence[Column], rows: Sequence[Sequence[Cell]]) -> _Shape:
    """Return how a table of these columns and cells is set."""
    texts = [[row[k].text for row in rows] for k in range(len(columns))]
    heads = [_head_lines(c, max(map(len, own), default=0)) for c, own in zip(columns, texts, strict=True)]
    widths = [max(map(len, [*own, *head])) for own, head in zip(texts, heads, strict=True)]
    size, room = next((s for s in _SIZES if _total(widths) <= s[1]), _SIZES[-1])
    shown = _narrowed(widths, columns, room)
    kinds = "".join(
        rf">{{\raggedright\arraybackslash}}p{{{_CHARACTER_EM * shown[k]:.1f}em}}"
        if shown[k] < widths[k]
        else ("l" if column.kind in ("text", "code") else "r")
        for k, column in enumerate(columns)
    )
    deepest = max(map(len, heads))
    raised = [[""] * (deepest - len(head)) + head for head in heads]
    lines = tuple(" & ".join(map(escaped, line)) + r" \\" for line in zip(*raised, strict=True))
    return _Shape(kinds, lines, size, _total(shown) > room)


def _total(widths: Sequence[float]) -> float:
    return sum(widths) + _BETWEEN * len(widths)


def _narrowed(widths: Sequence[int], columns: Sequence[Column], room: float) -> list[float]:
    """Return widths in characters, those of long texts (which break at spaces) taken back to suit *room*."""
    shown = [float(width) for width in widths]
    texts = [k for k, c in enumerate(columns) if c.kind == "text" and widths[k] > _LONG_TEXT]
    while (over := _total(shown) - room) > 0:
        widest = max(texts, key=lambda k: shown[k], default=None)
        if widest is None or shown[widest] <= _LONG_TEXT:
            break
        shown[widest] = max(_LONG_TEXT, shown[widest] - max(over / len(texts), 1.0))
    return shown


def _head_lines(column: Column, room: int) -> list[str]:
    """Return a head in lines no longer than the column's cells, broken at spaces; its unit is a line."""
    made: list[str] = []
    for word in column.head.split(" "):
        if made and len(made[-1]) + 1 + len(word) <= room:
            made[-1] += f" {word}"
        else:
            made.append(word)
    unit = f"({column.unit})" if column.unit else ""
    if unit and len(made[-1]) + 1 + len(unit) <= room:
        made[-1] += f" {unit}"
    elif unit:
        made.append(unit)
    return made


def _short(shape: _Shape, caption: str, label: str, body: list[str]) -> list[str]:
    return [
        r"\begin{table}",
        r"\centering",
        caption,
        label,
        *([shape.size] if shape.size else []),
        rf"\begin{{tabular}}{{{shape.columns}}}",
        r"\toprule",
        *shape.heads,
        r"\midrule",
        *body,
        r"\bottomrule",
        r"\end{tabular}",
        r"\end{table}",
    ]


def _long(shape: _Shape, caption: str, label: str, body: list[str]) -> list[str]:
    return [
        r"\begingroup",
        *([shape.size] if shape.size else []),
        rf"\begin{{longtable}}{{{shape.columns}}}",
        rf"{caption}{label}\\",
        r"\toprule",
        *shape.heads,
        r"\midrule",
        r"\endfirsthead",
        r"\toprule",
        *shape.heads,
        r"\midrule",
        r"\endhead",
        r"\bottomrule",
        r"\endfoot",
        *body,
        r"\end{longtable}",
        r"\endgroup",
    ]


def _label(name: str) -> str:
    return "".join(c if c.isascii() and c.isalnum() else "-" for c in name)


def _in_one_line(text: str) -> str:
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())
