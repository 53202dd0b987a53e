"""Layout trials: a module held at known node positions, one row or one block of rows a placement.

Placements are named by a ``placement`` column; without one, every row of a table is a placement, and in a log
over time every stretch in which no node moves. Where the trial logs pressure beside its signals, what a
correction for pressure needs is kept as well.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from campaign.methods.autocorrelation import stretch_means
from campaign.notices import Notice
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.logged_pressure import LoggedPressure, logged_pressure
from campaign.trials.plateaus import SHORTEST_PLATEAU, find_plateaus
from campaign.trials.staircase import SETTLING_SHARE

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

TABLE_ROWS = 60
"""Up to so many rows that never dwell, every row is a placement."""

STILL_MM = 0.25
"""Nodes that all stay within this over a whole log are at one placement."""


@dataclass(frozen=True)
class LayoutFeatures:
    """What is kept of one sensor's share of a layout trial with P placements and n recorded nodes.

    Attributes
    ----------
    identity
        Whose trial it is.
    logged
        Pressure that was logged beside the signal; ``None`` where none was, or it stood still.
    notices
        What a reader should know about the trial.
    signal_unit
        Unit of the signals.
    names
        Names of the placements, in the order taken.
    signal, standard_error
        Shape (P,): mean signal of each and the standard error of its noise (NaN where one row makes it).
    count
        Shape (P,): rows averaged.
    known_length_mm
        Shape (P,): length as recorded for this sensor; NaN where it is not.
    nodes, known_mm
        Names of the nodes that the file has positions of, and those, shape (P, n, 2).
    temperature_c
        Shape (P,): NaN where not recorded.
    """

    identity: TrialIdentity
    logged: LoggedPressure | None
    notices: tuple[Notice, ...] = ()
    signal_unit: str = ""
    names: tuple[str, ...] = ()
    signal: FloatArray = field(default_factory=lambda: np.zeros(0))
    standard_error: FloatArray = field(default_factory=lambda: np.zeros(0))
    count: IntArray = field(default_factory=lambda: np.zeros(0, dtype=np.int64))
    known_length_mm: FloatArray = field(default_factory=lambda: np.zeros(0))
    nodes: tuple[str, ...] = ()
    known_mm: FloatArray = field(default_factory=lambda: np.zeros((0, 0, 2)))
    temperature_c: FloatArray = field(default_factory=lambda: np.zeros(0))


@dataclass(frozen=True)
class _Block:
    """Rows of one placement."""

    name: str
    rows: IntArray


def features_of_layout(trial: Trial) -> LayoutFeatures:
    """Reduce one sensor's share of a layout trial to its placements.

    Parameters
    ----------
    trial
        With positions of nodes in mm; a table with one row a placement, a log over time, or either with a
        ``placement`` column.

    Returns
    -------
    LayoutFeatures
        Without placements, and with a notice, where the trial has none.
    """
    logged = logged_pressure(trial)
    if not trial.nodes:
        what = "a layout trial without any node's position"
        remedy = 'give columns quantity = "node_x" and "node_y" with {node} in the header'
        return LayoutFeatures(trial.identity, logged, (_noted(trial, "no-node-positions", what, remedy),))
    found, notices = _placements(trial)
    blocks = [block for block in found if np.isfinite(trial.signal[block.rows]).any()]
    if len(found) > len(blocks):
        missing = len(found) - len(blocks)
        many = "1 placement" if missing == 1 else f"{missing} placements"
        what = f"sensor {trial.identity.sensor}: {many} without any signal"
        notices.append(_noted(trial, "placement-without-signal", what, count=missing))
    if not blocks:
        notices.append(
            _noted(trial, "no-placements", f"sensor {trial.identity.sensor}: no placement is left")
        )
        return LayoutFeatures(trial.identity, logged, tuple(notices), trial.signal_unit)
    return _reduced(trial, blocks, logged, tuple(notices))


def _noted(trial: Trial, code: str, what: str, remedy: str = "", count: int = 1) -> Notice:
    done = "no shape is rebuilt from it"
    return Notice(code, "noted", trial.file, None, None, what, done, remedy, count)


def _reduced(
    trial: Trial, blocks: list[_Block], logged: LoggedPressure | None, notices: tuple[Notice, ...]
) -> LayoutFeatures:
    """Means over the rows of every block that have a signal."""
    kept = [block.rows[np.isfinite(trial.signal[block.rows])] for block in blocks]
    counts = np.array([len(rows) for rows in kept], dtype=np.int64)
    together = np.concatenate(kept)
    resolution = trial.signal_resolution if np.isfinite(trial.signal_resolution) else 0.0
    means = stretch_means(trial.signal[together], _times(trial)[together], counts, resolution=resolution)
    positions = np.stack(list(trial.nodes.values()), axis=1)
    return LayoutFeatures(
        identity=trial.identity,
        logged=logged,
        notices=notices,
        signal_unit=trial.signal_unit,
        names=tuple(block.name for block in blocks),
        signal=means.means,
        standard_error=np.where(counts > 1, means.standard_errors, np.nan),
        count=counts,
        known_length_mm=_means(trial.length_mm, kept),
        nodes=tuple(trial.nodes),
        known_mm=np.stack([_mean(positions[rows]) for rows in kept]),
        temperature_c=_means(trial.temperature_c, kept),
    )


def _times(trial: Trial) -> FloatArray:
    """Times in s; numbers of rows where time is missing or runs backwards."""
    if trial.time_s is None or not trial.time_is_ordered or not np.isfinite(trial.time_s).all():
        return np.arange(len(trial.signal), dtype=np.float64)
    return trial.time_s


def _mean(values: FloatArray) -> FloatArray:
    """Mean over the first axis of what is known; NaN where nothing is."""
    known = np.isfinite(values)
    counts = known.sum(axis=0)
    sums = np.where(known, values, 0.0).sum(axis=0)
    return np.asarray(np.where(counts > 0, sums / np.maximum(counts, 1), np.nan))


def _means(values: FloatArray | None, kept: list[IntArray]) -> FloatArray:
    if values is None:
        return np.full(len(kept), np.nan)
    return np.array([float(_mean(values[rows])) for rows in kept])


# --- where the placements are


def _placements(trial: Trial) -> tuple[list[_Block], list[Notice]]:
    """Blocks of rows, one a placement; those that dwell without their settling part."""
    if trial.placement is not None:
        return _named_blocks(trial, trial.placement)
    positions = np.concatenate(list(trial.nodes.values()), axis=1)
    rows = np.flatnonzero(np.isfinite(positions).any(axis=1))
    if trial.time_s is None:
        return _every_row(rows), []
    starts, stops = find_plateaus(_one_number(positions[rows]))
    if not len(starts) and len(rows) and np.ptp(positions[rows], axis=0).max() <= STILL_MM:
        starts, stops = np.array([0]), np.array([len(rows)])
    if not len(starts) and len(rows) <= TABLE_ROWS:
        return _every_row(rows), []
    blocks = [
        _Block(str(number), _settled(rows[start:stop]))
        for number, (start, stop) in enumerate(zip(starts, stops, strict=True), 1)
    ]
    return blocks, []


def _every_row(rows: IntArray) -> list[_Block]:
    return [_Block(str(number), rows[[k]]) for k, number in enumerate(range(1, len(rows) + 1))]


def _one_number(positions: FloatArray) -> FloatArray:
    """One number that tells placements apart: all coordinates, with weights that no symmetry shares."""
    weights = np.sqrt(np.arange(2.0, positions.shape[1] + 2.0)) % 1.0 + 0.5
    centred = positions - _mean(positions)
    return np.asarray(np.where(np.isfinite(centred), centred, 0.0) @ weights)


def _settled(rows: IntArray) -> IntArray:
    """Rows of a dwell without its first third, while the sensors settle."""
    first = int(np.ceil(len(rows) * SETTLING_SHARE)) if len(rows) >= SHORTEST_PLATEAU else 0
    return rows[first:]


def _named_blocks(trial: Trial, placement: FloatArray) -> tuple[list[_Block], list[Notice]]:
    """Stretches of one number in the placement column; a number that comes again is another placement."""
    known = np.flatnonzero(np.isfinite(placement))
    notices = []
    if len(known) < len(placement):
        missing = len(placement) - len(known)
        what = f"{missing} rows without a number of their placement"
        notices.append(_noted(trial, "missing-values", what, count=missing))
    cuts = np.flatnonzero(np.diff(placement[known]) != 0) + 1
    blocks: list[_Block] = []
    seen: dict[str, int] = {}
    for rows in np.split(known, cuts) if len(known) else []:
        number = f"{placement[rows[0]]:g}"
        seen[number] = seen.get(number, 0) + 1
        name = number if seen[number] == 1 else f"{number} ({seen[number]})"
        blocks.append(_Block(name, _settled(rows) if trial.time_s is not None else rows))
    return blocks, notices
