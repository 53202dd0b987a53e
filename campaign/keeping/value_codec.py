"""Values as bytes and back: numbers, texts, arrays, tables and our own frozen dataclasses, nothing else.

The bytes are a JSON tree followed by the raw bytes of the arrays. They name no code to be run: a class is
looked up among our own dataclasses and its fields are filled in; whatever else is named is refused. An array
comes back with its type, shape and order, a table with its types, and what was one object twice is one object
again. So a result that went through bytes gives the same numbers, to the last bit, as one that did not.
"""

from __future__ import annotations

import re
import struct
import sys
from collections.abc import Callable, Iterable
from dataclasses import fields, is_dataclass
from functools import cache
from importlib import import_module
from typing import Any

import numpy as np
import numpy.typing as npt
import orjson
import pandas as pd

ROOMS = ("notices", "units", "methods", "recordings", "trials", "analyses")
"""Rooms of ours whose dataclasses are values."""

_CLASS_NAME = re.compile(rf"campaign\.(?:{'|'.join(ROOMS)})(?:\.[a-z][a-z0-9_]*)?:[A-Za-z_][A-Za-z0-9_]*")
_MAGIC = b"cv1\n"
_LENGTH = struct.Struct("<Q")
_ALIGNMENT = 8
_PLAIN = (str, bool, type(None))
_SMALL = 2**53

Node = Any
"""A value as JSON: a text, a number, a truth value, null, or a list that begins with a tag."""


class NotKept(ValueError):  # noqa: N818 - that a value cannot be kept is no error of the program
    """A value is none of those that are written as bytes, or bytes are no value."""


def encode(value: object) -> bytes:
    """Return *value* as bytes.

    Parameters
    ----------
    value
        None, truth values, whole numbers, floats (NaN and infinities too), texts, bytes; tuples, lists, sets,
        frozen sets and dicts of values; numpy arrays and scalars; pandas tables, series and indices of them;
        dataclasses of the rooms :data:`ROOMS` (their fields; nothing else that hangs on them).

    Raises
    ------
    NotKept
        Where the value holds anything else, such as a function.
    """
    writer = _Writer()
    try:
        tree = orjson.dumps([writer.classes, writer.node(value)])
    except (TypeError, ValueError, RecursionError) as fault:  # orjson: a text that is no Unicode
        raise NotKept(str(fault)) from fault
    start = len(_MAGIC) + _LENGTH.size + len(tree)
    return b"".join([_MAGIC, _LENGTH.pack(len(tree)), tree, b"\0" * (-start % _ALIGNMENT), *writer.blobs])


def decode(data: bytes) -> object:
    """Return the value that :func:`encode` wrote.

    Raises
    ------
    NotKept
        Where the bytes are not of this form, or name a class that is none of our dataclasses.
    """
    try:
        return _read(data)
    except NotKept:
        raise
    except Exception as fault:  # whatever is wrong with bytes that anyone may have written
        raise NotKept(f"not a kept value: {fault}") from fault


def _read(data: bytes) -> object:
    head = len(_MAGIC) + _LENGTH.size
    if data[: len(_MAGIC)] != _MAGIC:
        raise NotKept("not a kept value: other first bytes")
    (length,) = _LENGTH.unpack_from(data, len(_MAGIC))
    start = head + length
    classes, node = orjson.loads(memoryview(data)[head:start])
    return _Reader(data, start + -start % _ALIGNMENT, classes).value(node)


# ---------------------------------------------------------------- classes


@cache
def _class_of(name: str) -> type:
    """Return one of our dataclasses by ``module:Name``; anything else is refused."""
    if not _CLASS_NAME.fullmatch(name):
        raise NotKept(f"{name[:80]!r} is no dataclass of ours")
    module, own = name.split(":")
    found = vars(sys.modules.get(module) or import_module(module)).get(own)
    if not (isinstance(found, type) and is_dataclass(found) and found.__module__ == module):
        raise NotKept(f"{name!r} is no dataclass of ours")
    return found


@cache
def _fields_of(kind: type) -> tuple[str, ...]:
    return tuple(field.name for field in fields(kind))


@cache
def _name_of(kind: type) -> str:
    name = f"{kind.__module__}:{kind.__qualname__}"
    if not is_dataclass(kind) or not _CLASS_NAME.fullmatch(name):
        raise NotKept(f"a value of type {name} is not kept")
    return name


# ---------------------------------------------------------------- writing


class _Writer:
    """Turns values into nodes, gathering arrays and class names on the way."""

    def __init__(self) -> None:
        self.blobs: list[bytes] = []
        self.classes: list[list[object]] = []
        self._size = 0
        self._class_places: dict[type, int] = {}
        self._seen: dict[int, int] = {}
        self._alive: list[object] = []

    def node(self, value: Any) -> Node:
        kind = type(value)
        if kind in _PLAIN:
            return value
        if kind is float:
            return value if value - value == 0.0 else ["f", repr(value)]
        if kind is int:
            return value if -_SMALL < value < _SMALL else ["i", str(value)]
        write = _WRITERS.get(kind)
        if write is not None:
            return write(self, value)
        number = self._seen.get(id(value))
        if number is not None:
            return ["r", number]
        made = self._object(kind, value)
        self._seen[id(value)] = len(self._alive)
        self._alive.append(value)
        return made

    def nodes(self, values: Iterable[object]) -> list[Node]:
        return [self.node(value) for value in values]

    def _object(self, kind: type, value: Any) -> Node:
        write = _OBJECT_WRITERS.get(kind)
        if write is not None:
            return write(self, value)
        if isinstance(value, np.generic):
            return ["n", self.blob(np.asarray(value))]
        return ["d", self._class_place(kind), *self.nodes(getattr(value, name) for name in _fields_of(kind))]

    def _class_place(self, kind: type) -> int:
        if kind not in self._class_places:
            self._class_places[kind] = len(self.classes)
            self.classes.append([_name_of(kind), *_fields_of(kind)])
        return self._class_places[kind]

    def blob(self, array: npt.NDArray[Any]) -> Node:
        """Write an array of numbers, texts of fixed width or times: type, shape, order and place."""
        order = "F" if array.flags.f_contiguous and not array.flags.c_contiguous else "C"
        if array.dtype.kind not in "biufcSUMm":
            raise NotKept(f"an array of {array.dtype} is not kept")
        data = array.tobytes(order)  # type: ignore[arg-type]
        place = self._size
        self.blobs.append(data)
        if pad := -len(data) % _ALIGNMENT:
            self.blobs.append(b"\0" * pad)
        self._size += len(data) + pad
        return [array.dtype.str, list(array.shape), order, place, len(data)]


def _write_array(writer: _Writer, array: npt.NDArray[Any]) -> Node:
    if array.dtype == object:
        return ["o", list(array.shape), writer.nodes(array.ravel(order="C").tolist())]
    return ["a", writer.blob(array)]


def _write_mapping(writer: _Writer, value: dict[object, object]) -> Node:
    return ["m", *(writer.node(part) for pair in value.items() for part in pair)]


def _write_column(writer: _Writer, array: Any) -> Node:
    """Write a pandas or numpy array of one dimension."""
    if isinstance(array, np.ndarray):
        return writer.node(array)
    dtype = array.dtype
    if isinstance(dtype, pd.StringDtype):
        missing = "nan" if dtype.na_value is not pd.NA else "NA"
        texts = array.to_numpy(object).tolist()
        places: dict[str, int] = {}  # names of sensors and recordings stand in a table many times
        codes = [places.setdefault(t, len(places)) if type(t) is str else -1 for t in texts]
        return ["ps", dtype.storage, missing, writer.blob(np.array(codes, np.int32)), list(places)]
    if isinstance(dtype, pd.CategoricalDtype):
        codes, categories = writer.node(np.asarray(array.codes)), writer.node(dtype.categories)
        return ["pc", codes, categories, bool(dtype.ordered)]
    if isinstance(array, pd.arrays.NumpyExtensionArray) or isinstance(dtype, np.dtype):
        return writer.node(array.to_numpy())
    raise NotKept(f"a column of {dtype} is not kept")


def _write_table(writer: _Writer, table: pd.DataFrame) -> Node:
    index, columns = writer.node(table.index), writer.node(table.columns)  # read in the same order
    arrays = [_write_column(writer, column.array) for _, column in table.items()]
    return ["df", index, columns, arrays]


def _write_series(writer: _Writer, series: pd.Series[Any]) -> Node:
    return ["s", writer.node(series.index), writer.node(series.name), _write_column(writer, series.array)]


def _write_index(writer: _Writer, index: pd.Index[Any]) -> Node:
    return ["x", writer.node(index.name), _write_column(writer, index.array)]


def _write_range(writer: _Writer, index: pd.RangeIndex) -> Node:
    return ["xr", writer.node(index.name), index.start, index.stop, index.step]


def _write_levels(writer: _Writer, index: pd.MultiIndex) -> Node:
    names, levels = writer.nodes(index.names), writer.nodes(index.levels)
    return ["xm", names, levels, writer.nodes(np.asarray(code) for code in index.codes)]


_WRITERS: dict[type, Callable[[_Writer, Any], Node]] = {
    tuple: lambda writer, value: ["t", *writer.nodes(value)],
    list: lambda writer, value: ["l", *writer.nodes(value)],
    dict: _write_mapping,
    frozenset: lambda writer, value: ["z", *writer.nodes(sorted(value, key=repr))],
    set: lambda writer, value: ["y", *writer.nodes(sorted(value, key=repr))],
    bytes: lambda writer, value: ["b", writer.blob(np.frombuffer(value, np.uint8))],
}
"""What is written anew wherever it stands."""

_OBJECT_WRITERS: dict[type, Callable[[_Writer, Any], Node]] = {
    np.ndarray: _write_array,
    pd.DataFrame: _write_table,
    pd.Series: _write_series,
    pd.Index: _write_index,
    pd.RangeIndex: _write_range,
    pd.MultiIndex: _write_levels,
}
"""What is written once and referred to after that; our dataclasses likewise."""


# ---------------------------------------------------------------- reading


class _Reader:
    """Turns nodes back into values."""

    def __init__(self, data: bytes, start: int, classes: list[list[str]]) -> None:
        self._data = data
        self._start = start
        self._classes = [_checked_class(*named) for named in classes]
        self._made: list[object] = []

    def value(self, node: Node) -> Any:
        if type(node) is not list:
            return node
        tag = node[0]
        if tag == "r":
            return self._made[node[1]]
        read = _READERS.get(tag)
        if read is not None:
            return read(self, node)
        made = _OBJECT_READERS[tag](self, node)
        self._made.append(made)
        return made

    def values(self, nodes: Iterable[Node]) -> list[Any]:
        return [self.value(node) for node in nodes]

    def blob(self, node: Node) -> npt.NDArray[Any]:
        text, shape, order, place, size = node
        dtype = np.dtype(text)
        if dtype.kind not in "biufcSUMm" or order not in ("C", "F") or place < 0 or size < 0:
            raise NotKept("not a kept array")
        data = self._data[self._start + place : self._start + place + size]
        if len(data) != size:
            raise NotKept("not a kept array: bytes are missing")
        if not size:
            return np.empty(shape, dtype, order)
        return np.frombuffer(data, dtype).reshape(shape, order=order).copy(order)

    def instance(self, node: Node) -> object:
        kind, names = self._classes[node[1]]
        if len(node) != len(names) + 2:
            raise NotKept(f"{kind.__name__} has other fields")
        made = object.__new__(kind)
        for name, part in zip(names, node[2:]):
            object.__setattr__(made, name, self.value(part))
        return made


def _checked_class(name: str, *names: str) -> tuple[type, tuple[str, ...]]:
    kind = _class_of(name)
    if _fields_of(kind) != names:
        raise NotKept(f"{name} has other fields")
    return kind, names


def _read_objects(reader: _Reader, node: Node) -> npt.NDArray[Any]:
    _, shape, items = node
    array = np.empty(len(items), dtype=object)
    array[:] = reader.values(items)
    return array.reshape(shape)


def _read_mapping(reader: _Reader, node: Node) -> dict[object, object]:
    parts = reader.values(node[1:])
    return dict(zip(parts[::2], parts[1::2], strict=True))


def _read_column(reader: _Reader, node: Node) -> Any:
    if node[0] == "ps":
        dtype = pd.StringDtype(node[1], na_value=np.nan if node[2] == "nan" else pd.NA)
        return pd.array(np.array([*node[4], None], dtype=object)[reader.blob(node[3])], dtype=dtype)
    if node[0] == "pc":
        codes, categories = reader.values(node[1:3])
        return pd.Categorical.from_codes(codes, categories, ordered=node[3])
    return reader.value(node)


def _read_table(reader: _Reader, node: Node) -> pd.DataFrame:
    index, columns = reader.value(node[1]), reader.value(node[2])
    arrays = [_read_column(reader, own) for own in node[3]]
    table = pd.DataFrame(dict(enumerate(arrays)), index=index)
    table.columns = columns
    return table


def _read_series(reader: _Reader, node: Node) -> pd.Series[Any]:
    index, name = reader.value(node[1]), reader.value(node[2])
    return pd.Series(_read_column(reader, node[3]), index=index, name=name)


def _read_index(reader: _Reader, node: Node) -> pd.Index[Any]:
    name, array = reader.value(node[1]), _read_column(reader, node[2])
    index: pd.Index[Any] = pd.Index(array, name=name, dtype=getattr(array, "dtype", None))
    return index


def _read_levels(reader: _Reader, node: Node) -> pd.MultiIndex:
    names, levels, codes = (reader.values(part) for part in node[1:])
    return pd.MultiIndex(levels=levels, codes=codes, names=names)


_READERS: dict[str, Callable[[_Reader, Node], Any]] = {
    "f": lambda _, node: {"nan": float("nan"), "inf": float("inf"), "-inf": float("-inf")}[node[1]],
    "i": lambda _, node: int(node[1]),
    "t": lambda reader, node: tuple(reader.values(node[1:])),
    "l": lambda reader, node: reader.values(node[1:]),
    "m": _read_mapping,
    "z": lambda reader, node: frozenset(reader.values(node[1:])),
    "y": lambda reader, node: set(reader.values(node[1:])),
    "b": lambda reader, node: reader.blob(node[1]).tobytes(),
}

_OBJECT_READERS: dict[str, Callable[[_Reader, Node], Any]] = {
    "d": _Reader.instance,
    "a": lambda reader, node: reader.blob(node[1]),
    "o": _read_objects,
    "n": lambda reader, node: reader.blob(node[1])[()],
    "df": _read_table,
    "s": _read_series,
    "x": _read_index,
    "xr": lambda reader, node: pd.RangeIndex(range(*node[2:]), name=reader.value(node[1])),
    "xm": _read_levels,
}
