"""Rows of one sensor or module are those that comparing whole columns finds, in order, every time."""

from __future__ import annotations

import pandas as pd
from hypothesis import given
from hypothesis import strategies as st

from campaign.pages.rows import of_module, of_sensor

NAMES = st.sampled_from(["M1", "M2", "7"])


@given(st.lists(st.tuples(NAMES, NAMES), max_size=12), NAMES, NAMES)
def test_rows_are_those_that_comparing_finds(pairs: list[tuple[str, str]], module: str, sensor: str) -> None:
    frame = pd.DataFrame(pairs, columns=["module", "sensor"]).assign(value=range(len(pairs)))
    own = frame[(frame["module"] == module) & (frame["sensor"] == sensor)]
    for _ in range(2):
        assert of_sensor(frame, module, sensor)["value"].tolist() == own["value"].tolist()
        in_module = frame[frame["module"] == module]
        assert of_module(frame, module)["value"].tolist() == in_module["value"].tolist()


def test_a_table_that_has_grown_is_gone_through_anew() -> None:
    frame = pd.DataFrame({"module": ["A"], "sensor": ["x"]})
    assert len(of_sensor(frame, "A", "x")) == 1
    frame.loc[1] = ["A", "x"]
    assert len(of_sensor(frame, "A", "x")) == 2
