"""A synthetic recording as a value, and its bytes in the dialect of a stand's computer."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Dialect:
    r"""How a stand's computer writes a table.

    Attributes
    ----------
    separator, decimal
        Between fields, and in numbers.
    line_end
        ``"\n"`` or ``"\r\n"``.
    byte_order_mark
        Whether the file starts with the UTF-8 mark.
    """

    separator: str = ","
    decimal: str = "."
    line_end: str = "\n"
    byte_order_mark: bool = False


PLAIN = Dialect()
SEMICOLON = Dialect(separator=";", decimal=",", line_end="\r\n")
MARKED = Dialect(line_end="\r\n", byte_order_mark=True)


@dataclass(frozen=True, eq=False)
class SyntheticColumn:
    """One column of a recording.

    Attributes
    ----------
    header
        As it stands in the file.
    values
        Shape (rows,); NaN is written as ``missing``.
    digits
        Digits after the decimal sign.
    missing
        What the instrument writes instead of a value.
    """

    header: str
    values: FloatArray
    digits: int
    missing: str = "OVER"

    def texts(self, decimal: str) -> list[str]:
        """Return the fields as texts with the given decimal sign."""
        pattern = f"%.{self.digits}f"
        fields = [pattern % value if value == value else self.missing for value in self.values.tolist()]
        return fields if decimal == "." else [field.replace(".", decimal) for field in fields]


@dataclass(frozen=True, eq=False)
class SyntheticRecording:
    """One file of a synthetic campaign before it is written.

    Attributes
    ----------
    file
        Path from the campaign folder with forward slashes.
    preamble
        ``# key: value`` lines, in order; a value of ``""`` writes the key alone as a remark.
    columns
        The table.
    """

    file: str
    preamble: tuple[tuple[str, str], ...]
    columns: tuple[SyntheticColumn, ...]

    def renamed(self, file: str) -> SyntheticRecording:
        """Return the same recording under another path."""
        return replace(self, file=file)

    def shortened(self, rows: int) -> SyntheticRecording:
        """Return the recording's first *rows* rows."""
        return replace(self, columns=tuple(replace(c, values=c.values[:rows]) for c in self.columns))

    def with_values(self, header: str, values: FloatArray) -> SyntheticRecording:
        """Return the recording with the values of one column replaced."""
        columns = tuple(replace(c, values=values) if c.header == header else c for c in self.columns)
        return replace(self, columns=columns)

    def values(self, header: str) -> FloatArray:
        """Return the values of the column headed *header*."""
        return next(column.values for column in self.columns if column.header == header)


def recording_bytes(recording: SyntheticRecording, dialect: Dialect = PLAIN) -> bytes:
    """Return the file's bytes: remark lines, header line, rows; UTF-8."""
    remarks = [f"# {key}: {value}" if value else f"# {key}" for key, value in recording.preamble]
    header = dialect.separator.join(column.header for column in recording.columns)
    fields = [column.texts(dialect.decimal) for column in recording.columns]
    rows = [dialect.separator.join(row) for row in zip(*fields, strict=True)]
    text = dialect.line_end.join([*remarks, header, *rows, ""])
    return text.encode("utf-8-sig" if dialect.byte_order_mark else "utf-8")
