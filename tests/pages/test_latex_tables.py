"""Tables as LaTeX: every text stands for itself, rules and rows are whole, numbers as on the page."""

from __future__ import annotations

import re
import unicodedata

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.analyses.results import CampaignResults
from campaign.pages.latex_tables import LONG_FROM, MOST_ROWS, escaped, latex_table
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table

COMMAND = re.compile(r"\\[A-Za-z]+(?:\{\}|\{0\})?|\\[\\{}$&#_%,]")
"""Every command that an escaped text may hold."""


def toy() -> Table:
    frame = pd.DataFrame(
        {
            "module": ["M_01", "50 % & more"],
            "slope": [0.3, np.nan],
            "u": [0.004, np.nan],
            "low": [0.29, np.nan],
            "high": [0.31, np.nan],
        }
    )
    columns = (
        Column("module", "Module", kind="text"),
        Column("slope", "Slope", "pF per %", uncertainty="u"),
        Column("slope", "Slope", interval=("low", "high")),
    )
    return Table("toy_lines", "Lines of 100 % of sensors.", frame, columns)


def test_a_table_has_its_rules_heads_with_units_and_rounded_rows() -> None:
    text = latex_table(toy(), "Calibration: table 1.1")
    assert text.splitlines() == [
        "% Calibration: table 1.1",
        r"% \usepackage{booktabs}",
        r"\begin{table}",
        r"\centering",
        r"\caption{Lines of 100 \% of sensors.}",
        r"\label{tab:toy-lines}",
        r"\scriptsize\setlength{\tabcolsep}{3pt}",
        r"\begin{tabular}{lrr}",
        r"\toprule",
        r"Module & Slope (pF per \%) & Slope \\",
        r"\midrule",
        r"M\_01 & 0.3000 $\pm$ 0.0040 & 0.300 [0.290, 0.310] \\",
        r"50 \% \& more & not identifiable from this design & not identifiable from this design \\",
        r"\bottomrule",
        r"\end{tabular}",
        r"\end{table}",
    ]


@pytest.mark.parametrize(("rows", "kept"), [(LONG_FROM + 1, LONG_FROM + 1), (MOST_ROWS + 50, MOST_ROWS)])
def test_a_long_table_breaks_over_pages_and_says_what_it_leaves_out(rows: int, kept: int) -> None:
    frame = pd.DataFrame({"x": range(rows)})
    table = Table("long", "Long.", frame, (Column("x", "x", kind="integer"),), shown_rows=None)
    text = latex_table(table)
    assert r"\begin{longtable}{r}" in text
    assert text.count(r"\endhead") == text.count(r"\endfirsthead") == 1
    assert len(re.findall(r"^(?:\\phantom\{0\})*\d+ \\\\$", text, re.MULTILINE)) == kept
    assert (f"The first {kept} of {rows} rows" in text) is (kept < rows)


@given(st.text(max_size=60))
def test_no_text_gives_a_command_of_its_own_and_braces_close(text: str) -> None:
    made = escaped(text)
    assert "\n" not in made
    mathematics = re.split(r"(?<!\\)\$", made)
    assert len(mathematics) % 2 == 1
    for index, part in enumerate(mathematics):
        left = COMMAND.sub("", part)
        if index % 2 == 0:
            assert not set(left) & set('\\{}$&#_%^"')
            assert left.replace("~", "").isprintable()
        else:
            assert re.fullmatch(r"\\[A-Za-z]+|[-']|[\^_]\{[-\d]\}|\^\\circ", part), part


@given(st.text(st.characters(codec="ascii", categories=("L", "N", "P", "S", "Zs")), max_size=40))
def test_an_escaped_text_reads_back_as_it_was(text: str) -> None:
    back = escaped(text)
    for written, read in (
        *((rf"\text{name}{{}}", sign) for name, sign in (("backslash", "\0"), ("asciicircum", "^"))),
        *(
            (rf"\text{name}{{}}", sign)
            for name, sign in (("asciitilde", "~"), ("less", "<"), ("greater", ">"))
        ),
        *((rf"\text{name}{{}}", sign) for name, sign in (("bar", "|"), ("quotedbl", '"'))),
        (r"\textasciigrave{}", "`"),
    ):
        back = back.replace(written, read)
    back = re.sub(r"\\([{}$&#_%])", r"\1", back).replace("\0", "\\")
    assert back == text


def test_signs_of_measurement_are_mathematics_and_unseen_marks_are_gone() -> None:
    assert escaped("λ² ≥ −5 ± 1 µm·kPa⁻¹") == (
        r"$\lambda$$^{2}$ $\ge$ $-$5 $\pm$ 1 $\mu$m$\cdot$kPa$^{-}$$^{1}$"
    )
    assert escaped("a\u202eb\u200bc") == "abc"
    assert all(unicodedata.category(c) != "Cf" for c in escaped("\ufeff\u2066x"))


def test_a_cell_that_begins_with_a_bracket_is_no_argument_of_the_row_before() -> None:
    frame = pd.DataFrame({"x": ["[1, 2]", "*"]})
    text = latex_table(Table("b", "B.", frame, (Column("x", "x", kind="text"),)))
    assert "{}[1, 2] \\\\" in text
    assert "{}* \\\\" in text


def cells_of(row: str) -> list[str]:
    return re.split(r"(?<!\\)&", row.removesuffix(r" \\"))


def test_heads_are_broken_to_the_width_of_their_columns_and_units_have_a_line() -> None:
    frame = pd.DataFrame({"p": [0.01, 0.2], "module": ["M1", "M2"]})
    columns = (Column("p", "Probability that it is kept", "%"), Column("module", "Module", kind="text"))
    lines = latex_table(Table("t", "T.", frame, columns)).splitlines()
    heads = [cells_of(line) for line in lines[lines.index(r"\toprule") + 1 : lines.index(r"\midrule")]]
    assert [head[0].strip() for head in heads] == ["Probability", "that it", "is kept", r"(\%)"]
    assert [head[1].strip() for head in heads] == ["", "", "", "Module"]


def test_long_texts_become_paragraphs_and_letters_smaller_until_the_table_fits() -> None:
    words = "a sentence that goes on for longer than any column of a table should be " * 2
    frame = pd.DataFrame({"what": [words] * 3, "done": [words] * 3, "n": [1, 2, 3]})
    columns = (
        Column("what", "What was found", kind="text"),
        Column("done", "What was done", kind="text"),
        Column("n", "n", kind="integer"),
    )
    text = latex_table(Table("t", "T.", frame, columns))
    widths = [float(w) for w in re.findall(r">\{\\raggedright\\arraybackslash\}p\{([\d.]+)em\}", text)]
    assert len(widths) == 2
    # 345 pt of scriptsize letters (7 pt): fifty em, less what the third column and the spaces take
    assert sum(widths) < 345 / 7 - 4
    assert r"\usepackage{array}" in text
    assert r"\scriptsize" in text
    assert "Wider than a page" not in text


def test_a_table_of_too_many_columns_says_that_it_is_too_wide() -> None:
    frame = pd.DataFrame({f"c{k}": [123.456] for k in range(24)})
    columns = tuple(Column(f"c{k}", f"Column {k}", digits=6) for k in range(24))
    assert "% Wider than a page of article" in latex_table(Table("t", "T.", frame, columns))


def test_every_table_of_a_site_is_whole_latex_of_letters_that_any_engine_knows(
    small_campaign_pages: tuple[CampaignResults, list[Page]],
) -> None:
    """What compiling them with pdfTeX showed (DEVELOPERS.md), kept without TeX."""
    tables = [table for page in small_campaign_pages[1] for table in page.tables]
    assert len(tables) > 30
    for table in tables:
        text = latex_table(table)
        assert text.isascii(), (table.name, sorted(set(re.findall(r"[^\x00-\x7f]", text))))
        columns = re.search(r"\\begin\{(?:tabular|longtable)\}\{(.*)\}$", text, re.MULTILINE)
        assert columns is not None
        kinds = re.sub(r">\{\\raggedright\\arraybackslash\}p\{[\d.]+em\}", "l", columns[1])
        assert re.fullmatch(r"[lr]+", kinds)
        rows = [line for line in text.splitlines() if line.endswith(r" \\")]
        assert {len(cells_of(row)) for row in rows} == {len(kinds)}, table.name
        body = re.sub(r"\\[\\{}$&#_%]", "", re.sub(r"(?m)^%.*$", "", text))
        assert body.count("{") == body.count("}")
        assert body.count("$") % 2 == 0
        opened = re.findall(r"\\(begin|end)\{(\w+)\}", body)
        assert [n for w, n in opened if w == "begin"] == [n for w, n in opened if w == "end"][::-1]
        assert text.count(r"\begingroup") == text.count(r"\endgroup") == text.count(r"\begin{longtable}")
