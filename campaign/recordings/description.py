"""``campaign.toml`` as a value: what was tested, how recordings are read, limits to judge by."""

from __future__ import annotations

from dataclasses import dataclass, field

from campaign.notices import Notice
from campaign.recordings.name_pattern import KEYS
from campaign.recordings.planned_design import PlannedDesign
from campaign.units import QUANTITY_FAMILIES

DESCRIPTION_FILE = "campaign.toml"
"""Name of the description in a campaign folder."""

KINDS: tuple[str, ...] = (
    "staircase",
    "cyclic",
    "hold",
    "pressure",
    "layout",
    "offaxis",
    "thermal",
    "endurance",
    "contact",
    "proximity",
    "bend",
    "blank",
)
"""Kinds of trial, in our words."""

QUANTITIES: tuple[str, ...] = (*QUANTITY_FAMILIES, "ignore")
"""Quantities of ``[[columns]]``."""

SAME_KEYS: tuple[str, ...] = (*(key for key in KEYS if key != "ignore"), "position", "started", "channel")
"""Keys of ``[recordings.same]``."""

TIMESTAMP_UNITS = frozenset({"timestamp", "datetime", "iso8601", "iso 8601"})
"""What may stand as the unit of a time column that holds dates with times of day."""

SHARE_OF_FULL_SCALE = ("share of full scale",)
REFERENCE_FAMILIES = ("strain", "length")
LIMIT_FAMILIES: dict[str, tuple[str, ...]] = {
    "linearity": SHARE_OF_FULL_SCALE,
    "hysteresis": SHARE_OF_FULL_SCALE,
    "repeatability": SHARE_OF_FULL_SCALE,
    "drift_1h": SHARE_OF_FULL_SCALE,
    "strain_error": REFERENCE_FAMILIES,
    "pressure_error": (*REFERENCE_FAMILIES, *SHARE_OF_FULL_SCALE),
    "node_error": ("length",),
}
"""Limits that can be judged, and the families of their units."""

READOUT_FAMILIES: dict[str, tuple[str, ...]] = {
    "frequency": ("frequency",),
    "delay": ("time",),
    "filter_time": ("time",),
}
"""Keys of ``[readout]`` that are quantities."""

USE_FAMILIES: dict[str, tuple[str, ...]] = {
    "time_since_zero": ("time",),
    "temperature_range": ("temperature difference",),
    "pressure": ("pressure",),
    "rate": ("rate", "speed"),
    "transverse_strain": ("strain",),
}
"""Keys of ``[use]`` that are quantities."""


@dataclass(frozen=True)
class Author:
    """One author of the campaign (texts; empty where not given)."""

    name: str
    affiliation: str = ""
    orcid: str = ""


@dataclass(frozen=True)
class ColumnRule:
    """One ``[[columns]]`` table: which columns of which files it serves and what they mean."""

    quantity: str
    header: str | None = None
    position: int | None = None
    unit: str | None = None
    thousands: str | None = None
    decimal: str | None = None
    missing: tuple[str, ...] = ()
    files: str | None = None
    sensor: str | None = None
    repetition: int | None = None
    node: str | None = None
    along: tuple[str, ...] = ()
    offset_mm: float = 0.0


@dataclass(frozen=True)
class LengthReference:
    """Standard uncertainties of the known length; NaN where not stated."""

    scale_relative: float = float("nan")
    zero_mm: float = float("nan")
    backlash_mm: float = float("nan")
    random_mm: float = float("nan")
    certificate: str = ""
    calibrated: str = ""

    @property
    def stated(self) -> bool:
        """Whether anything at all is stated."""
        return any(v == v for v in (self.scale_relative, self.zero_mm, self.backlash_mm, self.random_mm))


@dataclass(frozen=True)
class SignalReference:
    """Standard uncertainties of the readout (resolution: full step, ÷ √12 where used); NaN: not stated."""

    gain_relative: float = float("nan")
    offset: float = float("nan")
    resolution: float = float("nan")
    unit: str = ""
    random: float = float("nan")


@dataclass(frozen=True)
class Geometry:
    """Nodes of one unstretched module.

    ``nodes`` maps node name to (x, y) in mm; ``datum`` names the origin node and the node on +x.
    """

    name: str
    nodes: dict[str, tuple[float, float]]
    datum: tuple[str, ...] = ()


@dataclass(frozen=True)
class Description:
    """The whole of ``campaign.toml``, checked.

    ``limits`` maps the limit's name (``linearity``, ``hysteresis``, ``repeatability``, ``drift_1h``,
    ``strain_error``, ``pressure_error``, ``node_error``) to (value, unit). ``kinds`` maps the lab's own
    word to our kind. ``same`` holds ``[recordings.same]``. ``use`` holds ``[use]`` as written.
    ``range_strain`` and ``range_elongation_mm`` are NaN where not given. ``plan`` and ``earlier`` are
    kept as read; ``planned`` is the plan checked, ``None`` where there is none that could be rehearsed.
    ``simulated`` says that the recordings are invented, ``rehearsal`` that they were made from the plan.
    ``text`` is the file as it stands (for provenance). ``notices`` are remarks that do not stop.
    """

    title: str
    text: str = ""
    description: str = ""
    licence: str = ""
    date: str = ""
    first_day: str = ""
    last_day: str = ""
    authors: tuple[Author, ...] = ()
    files: tuple[str, ...] = ("trials/**/*.csv",)
    names: tuple[str, ...] = ()
    separator: str | None = None
    decimal: str | None = None
    encoding: str | None = None
    header_row: int | None = None
    split_where_time_restarts: bool = False
    same: dict[str, str] = field(default_factory=dict)
    kinds: dict[str, str] = field(default_factory=dict)
    columns: tuple[ColumnRule, ...] = ()
    length_reference: LengthReference = field(default_factory=LengthReference)
    signal_reference: SignalReference = field(default_factory=SignalReference)
    node_reference_mm: float = float("nan")
    readout: dict[str, str] = field(default_factory=dict)
    use: dict[str, str] = field(default_factory=dict)
    range_strain: float = float("nan")
    range_elongation_mm: float = float("nan")
    limits: dict[str, tuple[float, str]] = field(default_factory=dict)
    margins: dict[str, tuple[float, str]] = field(default_factory=dict)
    geometries: dict[str, Geometry] = field(default_factory=dict)
    electrode_resistance_ohm: float = float("nan")
    costs: dict[str, float] = field(default_factory=dict)
    plot_library: str | None = None
    earlier: tuple[dict[str, str], ...] = ()
    plan: dict[str, object] = field(default_factory=dict)
    planned: PlannedDesign | None = None
    simulated: bool = False
    rehearsal: bool = False
    notices: tuple[Notice, ...] = ()
