"""Rows by group as places in arrays: the same groups, in the same order, as tables by group have."""

import numpy as np
import pandas as pd
from hypothesis import given
from hypothesis import strategies as st

from campaign.analyses.grouped_rows import at, columns_of, groups_by, places_by, rows_of_all

ROWS = st.lists(st.tuples(st.sampled_from("abc"), st.sampled_from("xyz"), st.integers(-9, 9)), min_size=1)


@given(ROWS, st.booleans())
def test_groups_are_those_of_tables_by_group(rows: list[tuple[str, str, int]], sort: bool) -> None:
    table = pd.DataFrame(rows, columns=["first", "second", "value"])
    values = columns_of(table, ["value"])
    found = [
        (key, at(values, places)["value"].tolist())
        for key, places in groups_by(table, ["first", "second"], sort=sort)
    ]
    expected = [(key, own["value"].tolist()) for key, own in table.groupby(["first", "second"], sort=sort)]
    assert found == expected


def test_rows_without_a_name_belong_to_no_group() -> None:
    table = pd.DataFrame({"name": ["b", None, "a", "b"], "value": [1, 2, 3, 4]})
    groups = {key: places.tolist() for key, places in groups_by(table, ["name"])}
    assert groups == {("a",): [2], ("b",): [0, 3]}
    assert places_by(np.array([-1, -1], dtype=np.int64)) == []


def test_rows_of_many_tables_are_those_of_the_tables_joined() -> None:
    tables = [
        pd.DataFrame({"n": [1, 2], "x": [0.5, np.nan], "kept": [True, False]}),
        pd.DataFrame({"n": [3], "x": [7.0], "kept": [True]}),
    ]
    found = rows_of_all(tables, {"trial": ["one.csv", "two.csv"], "repetition": [1, 2]})
    parts = zip(tables, (("one.csv", 1), ("two.csv", 2)), strict=True)
    expected = pd.concat(
        [table.assign(trial=trial, repetition=number) for table, (trial, number) in parts], ignore_index=True
    )
    pd.testing.assert_frame_equal(found, expected)
    assert list(rows_of_all(tables, {}, ["x"])) == ["x"]
