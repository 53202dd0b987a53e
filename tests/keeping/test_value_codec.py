"""Values as bytes: everything that is kept comes back the same, and bytes name no code to be run."""

from __future__ import annotations

import math
import os
import struct
from dataclasses import dataclass

import numpy as np
import orjson
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from campaign.keeping.value_codec import NotKept, decode, encode
from campaign.notices import Notice
from campaign.recordings.recording import STRAIN, TrialIdentity
from campaign.trials.cyclic import LoopCurve
from campaign.trials.readings import ReadingPart

IDENTITY = TrialIdentity("a.csv", "hold", "g", "", "M1", "AB", "edge", 1, "", "", "", math.nan, 0.5)


def same(left: object, right: object) -> bool:
    """Whether two values are of one type and equal to the last bit; NaN equals NaN, 0 is not −0."""
    if type(left) is not type(right):
        return False
    if isinstance(left, float):
        return (math.isnan(left) and math.isnan(right)) or struct.pack("d", left) == struct.pack("d", right)
    if isinstance(left, (list, tuple)):
        return len(left) == len(right) and all(map(same, left, right))
    if isinstance(left, dict):
        return same(list(left.items()), list(right.items()))
    if isinstance(left, np.ndarray):
        alike = (left.dtype, left.shape) == (right.dtype, right.shape)
        return alike and (
            same(left.tolist(), right.tolist()) if left.dtype == object else left.tobytes() == right.tobytes()
        )
    return left == right


scalars = (
    st.none() | st.booleans() | st.integers() | st.floats() | st.binary(max_size=40)
    | st.text(st.characters(exclude_categories=["Cs"]), max_size=40)
)  # fmt: skip
keys = st.text(st.characters(exclude_categories=["Cs"]), max_size=5) | st.integers() | st.booleans()
arrays = hnp.arrays(
    st.sampled_from(["f8", "i8", "u1", "?", "<U4", "M8[ns]", "f4", "c16"]), hnp.array_shapes(min_side=0)
)
values = st.recursive(
    scalars | arrays,
    lambda inner: (
        st.lists(inner, max_size=4)
        | st.tuples(inner, inner)
        | st.dictionaries(keys, inner, max_size=4)
        | st.frozensets(scalars.filter(lambda value: value == value), max_size=4)
    ),
    max_leaves=15,
)


@given(values)
def test_every_value_comes_back_to_the_last_bit(value: object) -> None:
    assert same(decode(encode(value)), value)


@given(values)
def test_bytes_of_a_value_that_came_back_are_the_same(value: object) -> None:
    assert encode(decode(encode(value))) == encode(value)


@given(values, st.integers(0, 10**6), st.integers(1, 255))
def test_damaged_bytes_give_a_value_or_are_refused(value: object, place: int, change: int) -> None:
    """The check value is the store's; here nothing but a plain refusal may come of damage."""
    data = bytearray(encode(value))
    data[place % len(data)] ^= change
    try:
        decode(bytes(data))
    except NotKept:
        return


def test_our_dataclasses_come_back() -> None:
    curve = LoopCurve(3, np.array([1.0, math.nan]), np.array([2.0, -0.0]))
    part = ReadingPart({"x": np.array([1.0, 2.0]), "module": "M1", "used": True}, 2)
    notice = Notice("nul", "noted", None, None, 4, "ä €", "", count=3)
    again = decode(encode((IDENTITY, curve, part, notice, STRAIN)))
    assert isinstance(again, tuple)
    assert repr(again) == repr((IDENTITY, curve, part, notice, STRAIN))
    assert again[3] == notice
    assert again[1].signal.tobytes() == curve.signal.tobytes()


def test_what_was_one_object_is_one_again() -> None:
    shared = np.arange(1000.0)
    again = decode(encode([shared, IDENTITY, {"same": shared}, IDENTITY]))
    assert isinstance(again, list)
    assert again[0] is again[2]["same"]
    assert again[1] is again[3]
    assert len(encode([shared] * 50)) < 2 * len(encode(shared))


def test_arrays_keep_their_order_and_can_be_written_to() -> None:
    table = np.asfortranarray(np.arange(12.0).reshape(3, 4))
    apart = np.arange(20.0)[::3]
    again = decode(encode([table, apart, table.T[1:3]]))
    assert isinstance(again, list)
    assert again[0].flags.f_contiguous
    assert not again[0].flags.c_contiguous
    assert [part.tolist() for part in again] == [table.tolist(), apart.tolist(), table.T[1:3].tolist()]
    again[1][0] = 5.0
    assert again[1].base is None or again[1].base.nbytes == again[1].nbytes, "no larger array is held by it"


TABLES = {
    "plain": pd.DataFrame(
        {"number": [1, 2], "share": [0.5, math.nan], "name": ["a", None], "used": [True, False]}
    ),
    "empty": pd.DataFrame(columns=["a", "b"]),
    "no columns": pd.DataFrame(index=[3, 4]),
    "object": pd.DataFrame({"mixed": pd.Series([1, "a", None], dtype=object)}),
    "levels": pd.DataFrame(
        {"x": [1.0, 2.0, 3.0]},
        index=pd.MultiIndex.from_tuples([("a", 1), ("a", 2), ("b", 1)], names=["module", "run"]),
    ),
    "kinds": pd.DataFrame({"kind": pd.Categorical(["b", "a"], categories=["b", "a", "c"], ordered=True)}),
    "times": pd.DataFrame({"at": pd.to_datetime(["2026-03-01", "2026-03-02"])}),
    "twice": pd.DataFrame([[1.0, 2.0]], columns=["a", "a"]),
    "rows": pd.DataFrame({"a": [1, 2, 3]}).iloc[1:],
}  # fmt: skip


@pytest.mark.parametrize("name", TABLES)
def test_tables_come_back_with_types_index_and_names(name: str) -> None:
    again = decode(encode(TABLES[name]))
    assert isinstance(again, pd.DataFrame)
    pd.testing.assert_frame_equal(again, TABLES[name], check_exact=True)
    assert type(again.index) is type(TABLES[name].index)


def test_texts_that_stand_in_a_table_many_times_are_kept_once() -> None:
    table = pd.DataFrame({"trial": ["a long name of a recording.csv"] * 1000 + [None, ""]})
    data = encode(table)
    assert data.count(b"a long name") == 1
    found = decode(data)
    assert isinstance(found, pd.DataFrame)
    pd.testing.assert_frame_equal(found, table)
    assert len(set(map(id, found["trial"].to_numpy(object)[:1000]))) == 1


def test_series_come_back_with_name_and_index() -> None:
    series = pd.Series(["a", "b"], index=pd.Index([4, 7], name="row"), name="letter")
    again = decode(encode(series))
    assert isinstance(again, pd.Series)
    pd.testing.assert_series_equal(again, series)


@dataclass(frozen=True)
class Foreign:
    """A dataclass that is none of ours."""

    value: int


class Inherited(Notice):
    """Has the name of none of our dataclasses."""


@pytest.mark.parametrize(
    "value",
    [print, Foreign(1), os, object(), np.array([(1, 2)], dtype=[("a", int), ("b", int)]), Notice, "\ud800",
     Inherited("nul", "noted", None, None, None, "", "")],
    ids=["a function", "a foreign dataclass", "a module", "an object", "records", "a class", "half a letter",
         "a foreign heir"],
)  # fmt: skip
def test_anything_else_is_not_kept(value: object) -> None:
    with pytest.raises(NotKept):
        encode(value)


def written(classes: list[list[str]], node: object) -> bytes:
    tree = orjson.dumps([classes, node])
    return b"cv1\n" + struct.pack("<Q", len(tree)) + tree


@pytest.mark.parametrize(
    "named",
    [
        "os:system",
        "subprocess:Popen",
        "campaign.cli:main",
        "campaign.__main__:main",
        "campaign.simulation.__main__:main",
        "campaign.recordings.identity:os",
        "campaign.recordings.nothing:Nothing",
        "campaign.trials.hold:Trial",
        "campaign.trials.hold:features_of_hold",
        "campaign.trials..hold:Hold",
        "campaign.notices:Notice.at",
    ],
)
def test_bytes_that_name_anything_but_our_dataclasses_are_refused(named: str) -> None:
    with pytest.raises(NotKept):
        decode(written([[named]], ["d", 0]))


@pytest.mark.parametrize(
    "node",
    [
        ["d", 0, "nul"],
        ["d", 5],
        ["r", 3],
        ["q"],
        ["a", ["|O", [1], "C", 0, 8]],
        ["a", ["<f8", [4], "C", 0, 32]],
        ["a", ["<f8", [1], "C", -8, 8]],
        ["a", ["V8", [1], "C", 0, 8]],
        ["m", "key"],
        [],
    ],
)
def test_bytes_of_another_shape_are_refused(node: object) -> None:
    with pytest.raises(NotKept):
        decode(written([["campaign.notices:Notice", "code", "weight"]], node))
    with pytest.raises(NotKept):
        decode(written([], node))


@pytest.mark.parametrize("data", [b"", b"cv1\n", b"\x80\x04K\x01.", b"cv1\n" + b"\xff" * 20])
def test_bytes_of_something_else_are_refused(data: bytes) -> None:
    with pytest.raises(NotKept):
        decode(data)
