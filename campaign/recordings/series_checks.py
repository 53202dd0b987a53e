"""What the values of one file give away: sentinels, clocks that turn back, rows twice, a stuck signal."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from campaign.recordings.columns import REFERENCE_QUANTITIES, ColumnPlan
from campaign.recordings.remarks import Remark

FloatArray = npt.NDArray[np.float64]
LineNumbers = npt.NDArray[np.int64]

SUSPECT_VALUES = frozenset(
    sign * value
    for sign in (-1.0, 1.0)
    for value in (
        *(99.0, 999.0, 9999.0, 99999.0, 999999.0, 9999999.0, 999.9, 9999.9),
        *(32767.0, 32768.0, 65535.0, 2147483647.0, 2147483648.0, 4294967295.0),
    )
)
"""Values that instruments and loggers use for 'no value'."""

ISOLATION = 5.0
"""A suspect value is remarked on when it is this many ranges of the other values away from them."""

STUCK_ROWS = 8
"""Rows in which the signal must repeat before it is called stuck."""

STUCK_SHARE = 0.2
"""Share of the reference's range that it must cover meanwhile."""

EPOCH_SECONDS = (9.4e8, 4.2e9)
"""Seconds since 1970 of the years 2000 to 2102."""


def without_sentinels(
    column: ColumnPlan, raw: FloatArray, lines: LineNumbers
) -> tuple[FloatArray, tuple[Remark, ...]]:
    """Return a column in its canonical unit, with what stands for 'no value' made NaN.

    Parameters
    ----------
    column
        What the column is; its ``missing`` values are compared in the unit of the file.
    raw
        Shape (rows,), values as read, in the unit of the file.
    lines
        Shape (rows,), line of each.
    """
    remarks: list[Remark] = []
    absent = _declared_missing(column, raw)
    if absent is not None and absent.any():
        remarks.append(
            _at_first(absent, lines, "missing-token", column.position, f"{raw[np.argmax(absent)]:g}")
        )
        raw = np.where(absent, np.nan, raw)
    if column.unit is None:
        return raw, tuple(remarks)
    values = column.unit.scale.of_array(raw)
    low, high = column.unit.family.plausible
    if len(values) and (np.fmin.reduce(values) < low or np.fmax.reduce(values) > high):
        beyond = (values < low) | (values > high)
        text = f"{raw[np.argmax(beyond)]:g} {column.unit.spelling}"
        remarks.append(_at_first(beyond, lines, "sentinel", column.position, text))
        values, raw = np.where(beyond, np.nan, values), np.where(beyond, np.nan, raw)
    remarks.extend(_suspects(column, raw, lines))
    return values, tuple(remarks)


def _declared_missing(column: ColumnPlan, raw: FloatArray) -> npt.NDArray[np.bool_] | None:
    """Where a value stands that is declared to be none; ``None`` where only words are declared."""
    absent = None
    for word in column.missing:
        try:
            found = raw == float(word)
        except ValueError:
            continue
        absent = found if absent is None else absent | found
    return absent


def _at_first(
    where: npt.NDArray[np.bool_], lines: LineNumbers, code: str, column: int | None, words: str = ""
) -> Remark:
    return Remark(code, int(lines[np.argmax(where)]), column, "", int(np.count_nonzero(where)), words)


def _suspects(column: ColumnPlan, raw: FloatArray, lines: LineNumbers) -> list[Remark]:
    """Remark on usual 'no value' numbers that lie far outside the other values of the column."""
    if len(raw) < 3:
        return []
    found = []
    for value in {float(np.fmin.reduce(raw)), float(np.fmax.reduce(raw))} & SUSPECT_VALUES:
        where = raw == value
        others = raw[~where & ~np.isnan(raw)]
        if len(others) < 2:
            continue
        gap = max(value - others.max(), others.min() - value)
        if gap > ISOLATION * max(np.ptp(others), 1e-9 * abs(value)):
            found.append(_at_first(where, lines, "suspect-sentinel", column.position, f"{value:g}"))
    return found


def check_clock(column: ColumnPlan, time: FloatArray, raw: FloatArray, lines: LineNumbers) -> list[Remark]:
    """Remark on a time that runs backwards, and on a header in milliseconds over seconds since 1970."""
    kept = ~np.isnan(time)
    remarks = []
    in_order = np.all(time[1:] >= time[:-1])  # NaN is not
    back = np.diff(time[kept]) < 0 if not in_order else np.zeros(0, dtype=bool)
    if back.any():
        at = lines[kept][1:]
        first = int(np.argmax(back))
        text = f"{time[kept][first]:.10g} s, then {time[kept][first + 1]:.10g} s"
        remarks.append(_at_first(back, at, "time-order", column.position, words=text))
    low, high = EPOCH_SECONDS
    shorter_than_seconds = column.unit is not None and column.unit.scale.factor < 1
    if shorter_than_seconds and kept.any() and low < np.nanmin(raw) and np.nanmax(raw) < high:
        text = f"{column.unit.spelling}" if column.unit is not None else ""
        remarks.append(Remark("clock-unit", int(lines[0]), column.position, words=text))
    return remarks


def check_repeats(time: ColumnPlan, values: FloatArray, time_index: int, lines: LineNumbers) -> list[Remark]:
    """Remark on rows that repeat the one before wholly, and on times that repeat with other values.

    Parameters
    ----------
    time
        The time column.
    values
        Shape (rows, columns), all columns read.
    time_index
        Which of them is the time.
    lines
        Shape (rows,).
    """
    if len(values) < 2:
        return []
    same_time = values[1:, time_index] == values[:-1, time_index]
    if not same_time.any():
        return []
    candidates = np.flatnonzero(same_time)
    here, before = values[candidates + 1], values[candidates]
    whole = np.all((here == before) | (np.isnan(here) & np.isnan(before)), axis=1)
    remarks = []
    at = lines[candidates + 1]
    if whole.any():
        remarks.append(_at_first(whole, at, "duplicate-row", None))
    if not whole.all():
        remarks.append(_at_first(~whole, at, "time-resolution", time.position))
    return remarks


def check_stuck(
    columns: Sequence[ColumnPlan], values: Sequence[FloatArray], lines: LineNumbers
) -> list[Remark]:
    """Remark on signals that repeat to the last digit over many rows while the reference moves."""
    reference = next((v for c, v in zip(columns, values) if c.quantity in REFERENCE_QUANTITIES), None)
    if reference is None or len(reference) < STUCK_ROWS:
        return []
    whole = np.fmax.reduce(reference) - np.fmin.reduce(reference)
    remarks = []
    for column, signal in zip(columns, values):
        if column.quantity != "signal" or not whole > 0:
            continue
        start, stop = _longest_repeat(signal)
        meanwhile = reference[start:stop]
        if stop - start < STUCK_ROWS or np.isnan(meanwhile).all():
            continue
        covered = np.fmax.reduce(meanwhile) - np.fmin.reduce(meanwhile)
        if covered >= STUCK_SHARE * whole:
            text = f"{stop - start} rows at {signal[start]:.10g}"
            remarks.append(Remark("stuck", int(lines[start]), column.position, "", stop - start, text))
    return remarks


def _longest_repeat(values: FloatArray) -> tuple[int, int]:
    """Return start and stop of the longest run of equal values."""
    changes = np.flatnonzero(values[1:] != values[:-1]) + 1
    starts = np.concatenate(([0], changes))
    stops = np.concatenate((changes, [len(values)]))
    longest = int(np.argmax(stops - starts))
    return int(starts[longest]), int(stops[longest])
