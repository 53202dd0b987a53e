"""Layouts and plans that files share are those that each file has by itself."""

from __future__ import annotations

import random
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.recordings.columns import plan_columns
from campaign.recordings.description import ColumnRule, Description
from campaign.recordings.dialect import find_layout
from campaign.recordings.encoding import plain_text
from campaign.recordings.layout_in_common import layout_of_file, plan_of_file

CAMPAIGNS = Path(__file__).parents[1] / "campaigns"
HEADERS = (
    *("time_s,length_mm,capacitance_pF", "t (s);L (mm);C (pF)", "time [s]\tstage [mm]\tC_AB [pF]\tC_CD [pF]"),
    *("1,2,3", "a b c,d e,f", "time_s,length_mm,capacitance_pF,", '"time_s","length_mm","C_pF"', "x;y,z"),
    *("time_s,length_mm,12 pF", "time_s,,capacitance_pF", "Zeit_s,Länge_mm,C_pF", "s,mm,pF", ",,"),
)
COMMENTS = (
    *("# module: M01", "# started: 2025-02-24T08:37:00", "", "#", "   # a: 1,5", "#a=b;c", "# module: M02"),
    *("words without a sign", "#time_s,length_mm,capacitance_pF", " "),
)
NUMBERS = ("0", "1.5", "-2.25", "+3.", "1e5", "1.234", "12.345", "123.456", "1E-3", "20250224083700", "000")
ODD = ("", "OVER", "1,5", "2025-02-24T08:37:00", " 1.5", ".5", "nan", '"1"', "1.2.3")
RULES = (
    ColumnRule("time", position=1, unit="s", files="b*"),
    ColumnRule("signal", "C_{sensor}", unit="pF"),
    ColumnRule("length", "stage*", unit="mm", offset_mm=1.0),
)


def same(text: bytes, description: Description, file: str = "a.csv") -> bool:
    """Hold the shared layout and plan against the file's own; return whether they were shared."""
    for by_position in (False, True):
        own = find_layout(text, description, by_position=by_position)
        found = layout_of_file(text, description, by_position=by_position)
        assert replace(found, head=None) == own
        if own.readable:
            assert plan_of_file(found, description.columns, file) == plan_columns(
                own, description.columns, file
            )
    return found.head is not None


@st.composite
def tables(draw: st.DrawFn) -> str:
    """A file of a few comments, a line of names, and rows that are mostly plain numbers."""
    comments = draw(st.lists(st.sampled_from(COMMENTS), max_size=4))
    header, separator = draw(st.sampled_from(HEADERS)), draw(st.sampled_from((",", ";", "\t", " ")))
    fields, count = draw(st.integers(1, 5)), draw(st.integers(10, 20))
    some = draw(st.lists(st.sampled_from(NUMBERS), min_size=1, max_size=6))
    rng = random.Random(draw(st.integers(0, 10_000)))
    rows = [[rng.choice(some) for _ in range(fields)] for _ in range(count)]
    if rng.random() < 0.3:
        rows[rng.randrange(count)][0] = rng.choice(ODD)
    if rng.random() < 0.2:
        rows[rng.randrange(count)].append("7.5")
    lines = [*comments, header, *(separator.join(row) for row in rows)]
    return "\n".join(lines) + rng.choice(("\n", "", "\n\n# end\n"))


@given(
    tables(),
    st.sampled_from((None, ",", ";")),
    st.sampled_from((None, ".", ",")),
    st.sampled_from((None, None, 1, 3)),
    st.sampled_from(((), RULES)),
)
@settings(max_examples=400, deadline=None)
def test_a_shared_layout_is_the_files_own(
    text: str,
    separator: str | None,
    decimal: str | None,
    header_row: int | None,
    rules: tuple[ColumnRule, ...],
) -> None:
    description = Description("t", separator=separator, decimal=decimal, header_row=header_row, columns=rules)
    same(text.encode(), description, "b.csv")


def test_files_that_differ_in_comments_and_values_share_one_layout() -> None:
    rows = "".join(f"{0.01 * i:.2f},{60 + i},{100 - i}.5\n" for i in range(30))
    for comments in ("", "# module: M01\n", "# module: M02\n\n# started: 2025-02-24T08:37:00\n"):
        text = f"{comments}time_s,length_mm,capacitance_pF\n{rows}"
        assert same(text.encode(), Description("t"))
    assert not same(text.replace("100.5", "OVER").encode(), Description("t"))
    conflict = "# module: M01\n# module: M02\ntime_s,length_mm,capacitance_pF\n" + rows
    assert not same(conflict.encode(), Description("t"))


@pytest.mark.parametrize("folder", ["real", "hostile"])
def test_real_and_hostile_recordings_have_their_own_layouts(folder: str) -> None:
    files = [path for path in sorted((CAMPAIGNS / folder).rglob("*")) if path.suffix in (".csv", ".txt")]
    assert files
    for path in files:
        text = plain_text(path.read_bytes())
        if text.readable:
            same(text.data, Description("t", columns=RULES), path.name)
