"""What reading hands on: recordings in canonical units, and trials, one sensor's share of a recording."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from dataclasses import dataclass, field
from typing import TypeVar, cast

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
R = TypeVar("R")


@dataclass(frozen=True)
class ReferenceQuantity:
    """What a signal is calibrated against: strain where rest lengths are known, else a length.

    Attributes
    ----------
    name
        ``"strain"``, ``"elongation"`` or ``"length"``.
    unit
        Canonical unit of the values: ``"mm/mm"`` for strain, else ``"mm"``.
    shown_unit
        Unit on pages: ``"%"`` for strain (values times 100), else ``"mm"``.
    symbol
        Symbol in formulas: ``"ε"``, ``"ΔL"`` or ``"L"``.
    column_suffix
        How table columns end: ``""`` for strain, ``"_mm"`` else.
    """

    name: str
    unit: str
    shown_unit: str
    symbol: str
    column_suffix: str

    @property
    def shown_factor(self) -> float:
        """Factor from canonical values to shown values (100 for strain in %, else 1)."""
        return 100.0 if self.name == "strain" else 1.0


STRAIN = ReferenceQuantity("strain", "mm/mm", "%", "ε", "")
ELONGATION = ReferenceQuantity("elongation", "mm", "mm", "ΔL", "_mm")
LENGTH = ReferenceQuantity("length", "mm", "mm", "L", "_mm")


@dataclass(frozen=True)
class Channel:
    """One column of a recording that is read, in canonical units.

    Attributes
    ----------
    quantity
        One of the quantities of the folder contract: ``"time"``, ``"length"``, ``"signal"``, ….
    unit
        Canonical unit of ``values`` (s, mm, mm/mm, kPa, N, °C, %; a signal keeps its own, such as pF).
    values
        Shape (rows,), float64; missing is NaN. Texts (``direction``) are coded: up 1, down −1.
    header
        Header as it stands in the file (empty where the file has none).
    position
        Place of the column in the file, from 1.
    sensor, repetition, node
        What the header or the description says of whose column it is; ``None`` where it is the file's.
    along
        Sensors that a length column belongs to; empty: those of its file.
    """

    quantity: str
    unit: str
    values: FloatArray
    header: str
    position: int
    sensor: str | None = None
    repetition: int | None = None
    node: str | None = None
    along: tuple[str, ...] = ()


@dataclass(frozen=True)
class Recording:
    """One file, read: its channels and what its preamble says.

    Attributes
    ----------
    file
        Path from the campaign folder with forward slashes.
    sha256
        Hash of the file's bytes, lower-case hexadecimal.
    size_bytes
        Size of the file.
    rows
        Rows kept.
    channels
        The columns that are read, in file order.
    preamble
        ``# key: value`` lines before the table, keys in lower case.
    line_numbers
        Shape (rows,), line of the file that each row came from, for notices.
    constants
        Texts of columns that say the same in every row (``module``, ``kind``, …), by lower-case header.
    """

    file: str
    sha256: str
    size_bytes: int
    rows: int
    channels: tuple[Channel, ...]
    preamble: dict[str, str] = field(default_factory=dict)
    line_numbers: npt.NDArray[np.int64] | None = None
    constants: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class TrialIdentity:
    """Whose trial it is, settled from registers, preamble, name and description.

    ``file`` with ``sensor`` and ``repetition`` names a trial; two trials of one file are one run of the stand
    (a shared run). ``repetition`` is a number from 1; ``session`` is ``""`` where none is recorded, ``batch``
    likewise; ``started`` is an ISO 8601 text or ``""``; ``channel`` is the readout channel or ``""``.
    ``rest_length_mm`` is NaN where unknown: none is ever invented.
    """

    file: str
    kind: str
    generation: str
    batch: str
    module: str
    sensor: str
    position: str
    repetition: int
    session: str
    started: str
    channel: str
    rest_length_mm: float
    rest_length_uncertainty_mm: float


@dataclass(frozen=True)
class Trial:
    """One sensor's share of one run: identity and series in canonical units.

    Every array has shape (rows,), float64, NaN where missing; ``None`` where not recorded. ``reference`` says
    in which of ``length_mm``, ``elongation_mm`` or ``strain`` the stand's value was recorded; the others are
    derived from the rest length where it is known. ``placement`` numbers the placements of a layout trial;
    ``nodes`` holds the recorded positions of all nodes of the file, (rows, 2) in mm by name. ``shared`` is
    for :meth:`once_a_file` alone.
    """

    identity: TrialIdentity
    signal: FloatArray
    signal_unit: str
    time_s: FloatArray | None = None
    length_mm: FloatArray | None = None
    elongation_mm: FloatArray | None = None
    strain: FloatArray | None = None
    level: FloatArray | None = None
    direction: FloatArray | None = None
    pressure_kpa: FloatArray | None = None
    force_n: FloatArray | None = None
    temperature_c: FloatArray | None = None
    humidity_percent: FloatArray | None = None
    cycle: FloatArray | None = None
    placement: FloatArray | None = None
    nodes: dict[str, FloatArray] = field(default_factory=dict)
    line_numbers: npt.NDArray[np.int64] | None = None
    time_is_ordered: bool = True
    signal_resolution: float = float("nan")
    reference: str = "length"
    shared: dict[Hashable, tuple[object, object]] = field(default_factory=dict, repr=False, compare=False)

    @property
    def file(self) -> str:
        """Path of the recording from the campaign folder."""
        return self.identity.file

    def once_a_file(self, what: Hashable, columns: tuple[FloatArray | None, ...], find: Callable[[], R]) -> R:
        """Return what *find* gives, found once for all trials of a file that have the same columns.

        Sensors of a wide file share the columns that name no sensor: what comes of those alone need not be
        found again for each. Columns are the same where they are one object; they are never altered.
        """
        key = (what, *map(id, columns))
        if key not in self.shared:
            self.shared[key] = (columns, find())
        return cast(R, self.shared[key][1])
