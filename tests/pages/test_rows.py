"""Rows of one sensor or module are those that comparing whole columns finds, in order, every time."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
from hypothesis import given
from hypothesis import strategies as st

from campaign.pages.rows import of_module, of_sensor, records_of, records_of_sensor

NAMES = st.sampled_from(["M1", "M2", "7"])


@given(st.lists(st.tuples(NAMES, NAMES), max_size=12), NAMES, NAMES)
def test_rows_are_those_that_comparing_finds(pairs: list[tuple[str, str]], module: str, sensor: str) -> None:
    frame = pd.DataFrame(pairs, columns=["module", "sensor"]).assign(value=range(len(pairs)))
    own = frame[(frame["module"] == module) & (frame["sensor"] == sensor)]
    for _ in range(2):
        assert of_sensor(frame, module, sensor)["value"].tolist() == own["value"].tolist()
        assert [row["value"] for row in records_of_sensor(frame, module, sensor)] == own["value"].tolist()
        in_module = frame[frame["module"] == module]
        assert of_module(frame, module)["value"].tolist() == in_module["value"].tolist()


def test_a_table_that_has_grown_is_gone_through_anew() -> None:
    frame = pd.DataFrame({"module": ["A"], "sensor": ["x"]})
    assert len(of_sensor(frame, "A", "x")) == 1
    frame.loc[1] = ["A", "x"]
    assert len(of_sensor(frame, "A", "x")) == 2


@given(
    st.lists(
        st.tuples(
            st.text(max_size=3),
            st.integers(0, 9),
            st.floats(allow_nan=False),
            st.booleans(),
            st.integers(0, 9),
        ),
        max_size=6,
    )
)
def test_records_are_plain_values_as_those_of_the_library(
    rows: list[tuple[str, int, float, bool, int]],
) -> None:
    frame = pd.DataFrame(rows, columns=["text", "count", "value", "used", "boxed"])
    frame["boxed"] = pd.Series([np.int64(boxed) for *_, boxed in rows], dtype=object)
    made, expected = records_of(frame), frame.to_dict("records")
    assert made == expected
    assert [list(map(type, row.values())) for row in made] == [
        list(map(type, row.values())) for row in expected
    ]


def test_what_is_missing_stays_so() -> None:
    frame = pd.DataFrame({"text": ["a", None], "value": [1.0, float("nan")]})
    assert [math.isnan(value) for value in records_of(frame)[1].values()] == [True, True]
    assert records_of(frame.iloc[:0]) == []
