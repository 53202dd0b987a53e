r"""Tables for a paper: plain LaTeX with the rules of ``booktabs``, rounded as on the page.

Every character that LaTeX takes for a command is written so that it stands for itself; signs that older
engines do not know are written as mathematics. A long table is a ``longtable`` and holds :data:`MOST_ROWS`
rows at most.
"""

from __future__ import annotations

import unicodedata

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
    needed = r"\usepackage{booktabs}" + (r" \usepackage{longtable}" if long else "")
    notes = [f"% {_in_one_line(place)}"] if place else []
    notes.append(f"% {needed}")
    if len(rows) < len(table.frame):
        notes.append(f"% The first {len(rows)} of {len(table.frame)} rows; the CSV file holds all of them.")
    heads = " & ".join(_head(column) for column in table.columns) + r" \\"
    body = [_row(cells) for cells in rows]
    caption, label = rf"\caption{{{escaped(table.caption)}}}", rf"\label{{tab:{_label(table.name)}}}"
    columns = "".join("l" if column.kind in ("text", "code") else "r" for column in table.columns)
    lines = (
        _long(columns, caption, label, heads, body) if long else _short(columns, caption, label, heads, body)
    )
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


def _head(column: Column) -> str:
    return escaped(f"{column.head} ({column.unit})" if column.unit else column.head)


def _row(cells: list[Cell]) -> str:
    return " & ".join(_cell(cell) for cell in cells) + r" \\"


def _cell(cell: Cell) -> str:
    """Return a cell; one that begins with a bracket is guarded: a row's end takes brackets for itself."""
    text = escaped(cell.text)
    return f"{{}}{text}" if text.startswith(("[", "*")) else text


def _short(columns: str, caption: str, label: str, heads: str, body: list[str]) -> list[str]:
    return [
        r"\begin{table}",
        r"\centering",
        caption,
        label,
        rf"\begin{{tabular}}{{{columns}}}",
        r"\toprule",
        heads,
        r"\midrule",
        *body,
        r"\bottomrule",
        r"\end{tabular}",
        r"\end{table}",
    ]


def _long(columns: str, caption: str, label: str, heads: str, body: list[str]) -> list[str]:
    return [
        rf"\begin{{longtable}}{{{columns}}}",
        rf"{caption}{label}\\",
        r"\toprule",
        heads,
        r"\midrule",
        r"\endfirsthead",
        r"\toprule",
        heads,
        r"\midrule",
        r"\endhead",
        r"\bottomrule",
        r"\endfoot",
        *body,
        r"\end{longtable}",
    ]


def _label(name: str) -> str:
    return "".join(c if c.isascii() and c.isalnum() else "-" for c in name)


def _in_one_line(text: str) -> str:
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())
