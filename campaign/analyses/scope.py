"""What a campaign measured and what it did not: the first words of the site, as facts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from campaign.recordings.description import KINDS, Description
from campaign.recordings.recording import STRAIN, ReferenceQuantity

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration
    from campaign.recordings.intake import Intake

ANALYSED = KINDS
"""Kinds that an analysis answers."""


@dataclass(frozen=True)
class Exclusion:
    """A sensor (a whole module where ``sensor`` is empty) in no result, and why (empty: not said)."""

    module: str
    sensor: str
    reason: str


@dataclass(frozen=True)
class Span:
    """Smallest and largest of something recorded."""

    low: float
    high: float


@dataclass(frozen=True)
class Scope:
    """What the campaign measured, for the first words of the site.

    Attributes
    ----------
    title
        Of the campaign.
    simulated, rehearsal
        Whether the recordings are invented, and whether they were made from a plan.
    stands
        Names in the session register, sorted; empty where not recorded.
    reference
        What strain stands for in this campaign.
    x
        Range of the readings used, in units of the reference; ``None`` without readings.
    temperature_c, humidity_percent
        Range recorded with the readings; ``None`` where not recorded.
    rest_length_mm
        Range of the rest lengths; ``None`` where unknown.
    generations, modules, sensors, batches
        Numbers of each among what was used; ``batches`` is 0 where none is recorded.
    mountings
        Sessions a module, smallest and largest; ``None`` where not recorded.
    runs
        Staircases a sensor, smallest and largest; ``None`` without any.
    first_day, last_day
        ISO days, empty where not recorded.
    set_aside
        Sensors with recordings, none of which is used.
    failed_before_testing
        Sensors and modules that the registers say failed before testing, or that were never recorded.
    trials_set_aside
        Number of trials set aside of sensors that are otherwise used.
    not_analysed
        Kind and number of trials used that no analysis answers yet.
    not_measured
        Kinds with no trial at all.
    measured
        Kind and number of all recordings used.
    """

    title: str
    simulated: bool
    stands: tuple[str, ...]
    reference: ReferenceQuantity
    x: Span | None
    temperature_c: Span | None
    humidity_percent: Span | None
    rest_length_mm: Span | None
    generations: int
    modules: int
    sensors: int
    batches: int
    mountings: Span | None
    runs: Span | None
    first_day: str
    last_day: str
    set_aside: tuple[Exclusion, ...]
    failed_before_testing: tuple[Exclusion, ...]
    trials_set_aside: int
    not_analysed: tuple[tuple[str, int], ...]
    not_measured: tuple[str, ...]
    rehearsal: bool = False
    measured: tuple[tuple[str, int], ...] = ()


def describe_scope(
    description: Description,
    intake: Intake,
    calibration: Calibration | None,
    reference: ReferenceQuantity | None = None,
) -> Scope:
    """Sum up what was measured, from the registers, the trials used and the readings used.

    *reference* is what lengths are given in where no calibration says so.
    """
    trials = intake.trials
    used = trials[trials["fate"] == "used"]
    rows = _used_readings(calibration)
    who = rows if len(rows) else used
    days = sorted(day for day in used["started"].astype(str).str[:10] if day[:4].isdigit())
    kinds = used.drop_duplicates("file")["kind"].value_counts()
    sessions = who[who["session"].astype(str) != ""]
    return Scope(
        title=description.title,
        simulated=description.simulated,
        stands=_names(intake.sessions, "stand"),
        reference=calibration.reference if calibration is not None else reference or STRAIN,
        x=_visited(rows),
        temperature_c=_span(rows, "temperature_c"),
        humidity_percent=_span(rows, "humidity_percent"),
        rest_length_mm=_rest_lengths(calibration),
        generations=int(who["generation"].nunique()),
        modules=len(who.drop_duplicates(["generation", "module"])),
        sensors=len(who.drop_duplicates(["generation", "module", "sensor"])),
        batches=len({b for b in who["batch"].astype(str).unique() if b}),
        mountings=_counts(sessions, ["generation", "module"], "session"),
        runs=_run_counts(rows),
        first_day=description.first_day or (days[0] if days else ""),
        last_day=description.last_day or (days[-1] if days else ""),
        set_aside=_set_aside(intake, who),
        failed_before_testing=_failed_before_testing(intake),
        trials_set_aside=_trials_set_aside(trials, used),
        not_analysed=tuple((k, int(kinds[k])) for k in KINDS if k in kinds and k not in ANALYSED),
        not_measured=tuple(k for k in KINDS if k not in kinds),
        rehearsal=description.rehearsal,
        measured=tuple((k, int(kinds[k])) for k in KINDS if k in kinds),
    )


def _used_readings(calibration: Calibration | None) -> pd.DataFrame:
    if calibration is None:
        return pd.DataFrame(columns=["generation", "module", "sensor", "session", "batch", "trial", "x"])
    return calibration.readings[calibration.readings["used"]]


def _span(rows: pd.DataFrame, column: str) -> Span | None:
    values = rows[column].dropna() if column in rows else pd.Series(dtype=float)
    return Span(float(values.min()), float(values.max())) if len(values) else None


def _visited(rows: pd.DataFrame) -> Span | None:
    """Range of the nominal levels where all readings have one, else of what was recorded."""
    nominal = "nominal_level" in rows and len(rows) > 0 and bool(rows["nominal_level"].notna().all())
    return _span(rows, "nominal_level" if nominal else "x")


def _rest_lengths(calibration: Calibration | None) -> Span | None:
    return None if calibration is None else _span(calibration.sensor_lines, "rest_length_mm")


def _names(register: pd.DataFrame | None, column: str) -> tuple[str, ...]:
    if register is None or column not in register:
        return ()
    return tuple(sorted({str(v) for v in register[column].dropna() if str(v)}))


def _counts(rows: pd.DataFrame, keys: list[str], column: str) -> Span | None:
    if rows.empty:
        return None
    numbers = rows.groupby(keys)[column].nunique()
    return Span(float(numbers.min()), float(numbers.max()))


def _run_counts(rows: pd.DataFrame) -> Span | None:
    keys = ["generation", "module", "sensor"]
    runs = rows.drop_duplicates([*keys, "trial", "session", "repetition"]) if len(rows) else rows
    return (
        None
        if runs.empty
        else Span(*map(float, (runs.groupby(keys).size().min(), runs.groupby(keys).size().max())))
    )


def _set_aside(intake: Intake, used: pd.DataFrame) -> tuple[Exclusion, ...]:
    """Sensors that have recordings, no row among *used*, and no fate before testing."""
    present = used[["module", "sensor"]].drop_duplicates()
    working = set(zip(present["module"], present["sensor"], strict=True)) | _dead_before_testing(intake)
    recorded = intake.trials.loc[intake.trials["sensor"].astype(str) != "", ["module", "sensor"]]
    pairs = sorted(set(zip(recorded["module"].astype(str), recorded["sensor"].astype(str), strict=True)))
    return tuple(Exclusion(m, s, _reason(intake, m, s)) for m, s in pairs if (m, s) not in working)


def _failed_before_testing(intake: Intake) -> tuple[Exclusion, ...]:
    """Sensors and modules that the registers say failed before testing, or that were never recorded."""
    recorded = set(zip(intake.trials["module"].astype(str), intake.trials["sensor"].astype(str), strict=True))
    modules = {module for module, _ in recorded}
    built = {(m, "") for m in _column(intake.modules, "module") if m not in modules}
    pairs = zip(_column(intake.sensors, "module"), _column(intake.sensors, "sensor"), strict=True)
    sensors = {(m, s) for m, s in pairs if m in modules and (m, s) not in recorded}
    failed = sorted(built | sensors | _dead_before_testing(intake))
    return tuple(Exclusion(m, s, _reason(intake, m, s)) for m, s in failed)


def _dead_before_testing(intake: Intake) -> set[tuple[str, str]]:
    """Sensors whose fate in the register says that they failed before testing, recorded or not."""
    fates = _column(intake.sensors, "fate")
    if not fates:
        return set()
    names = zip(_column(intake.sensors, "module"), _column(intake.sensors, "sensor"), fates, strict=True)
    return {(m, s) for m, s, fate in names if "before test" in fate.lower()}


def _column(register: pd.DataFrame | None, column: str) -> list[str]:
    return [] if register is None or column not in register else [str(v) for v in register[column]]


def _reason(intake: Intake, module: str, sensor: str) -> str:
    """Reason in the registers (``reason``, else ``fate``), sensor before module; empty where none is said."""
    for register, where in (
        (intake.sensors, {"module": module, "sensor": sensor}),
        (intake.modules, {"module": module}),
    ):
        if register is None or not set(where) <= set(register.columns):
            continue
        rows = register[np.logical_and.reduce([register[k].astype(str) == v for k, v in where.items()])]
        for column in ("reason", "fate"):
            texts = [t for t in _column(rows, column) if t and t not in ("nan", "used", "tested")]
            if texts:
                return texts[0]
    return ""


def _trials_set_aside(trials: pd.DataFrame, used: pd.DataFrame) -> int:
    working = set(zip(used["module"], used["sensor"], strict=True))
    aside = trials[trials["fate"] == "set aside"]
    return sum(pair in working for pair in zip(aside["module"], aside["sensor"], strict=True))
