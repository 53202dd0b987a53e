"""The facts of page 0, chosen and ordered, without a word of prose: templates say them.

A finding is what an engineer would repeat to a colleague: one figure with its interval, what it holds for,
how many sensors exceed it and which is worst. 'More' and 'less' are facts only where intervals exclude
equality.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
import pandas as pd
from scipy import special

from campaign.analyses.limits import Limits
from campaign.analyses.scope import Scope, describe_scope
from campaign.analyses.sensor_figures import (
    expanded_uncertainty,
    principal_lines,
    principal_records,
    principal_run_lines,
)
from campaign.methods.holm import holm_adjusted
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration, CalibrationRecord
    from campaign.analyses.calibration_effort import CalibrationEffort
    from campaign.analyses.residuals import Residuals
    from campaign.analyses.variance import Variance
    from campaign.recordings.intake import Intake

ENOUGH_FACTOR = 1.1
"""Without a limit an effort counts as enough up to this multiple of the SD with a sensor's own line."""

BADLY_STRAIGHT_PERCENT_FSO = 10.0
"""From this mean departure on, a straight line is a bad description and page 0 says so first.

A choice of ours: ten times the residual of the order of 1 % that sensors of this kind are usually read to.
"""

OWN_LINE = ("sensor", "rezero_additive", "rezero_ratio")
"""Efforts that calibrate each sensor."""

AVERAGED = 10
"""Readings of one run in the mean that is quoted beside a single reading."""


@dataclass(frozen=True)
class Worst:
    """The sensor with the largest figure."""

    generation: str
    module: str
    sensor: str
    value: float


@dataclass(frozen=True)
class SensorFigure:
    """One figure of every sensor of a generation, summed up.

    ``median`` and ``smallest`` are over sensors; ``mean`` with its 95 % interval counts modules as the unit
    (NaN limits with one module; with one sensor they are those of its own figure, where it has any);
    ``exceeding`` is the number of sensors above ``threshold`` (the limit where there is one, else the mean);
    ``put_back`` is the mean with everything set aside put back, NaN where nothing was or it cannot be
    computed.
    """

    generation: str
    sensors: int
    modules: int
    mean: float
    median: float
    smallest: float
    low: float
    high: float
    worst: Worst
    threshold: float
    exceeding: int
    has_limit: bool
    put_back: float = math.nan


@dataclass(frozen=True)
class Effort:
    """One row of the calibration effort table."""

    effort: str
    label: str
    strain_sd: float
    strain_sd_left_out: float
    strain_expanded: float
    low: float
    high: float
    factor: float
    agrees: bool | None

    @property
    def expanded_low(self) -> float:
        """Lower 95 % limit of ``strain_expanded``; NaN where the SD has none."""
        return self.strain_expanded * self.low / self.strain_sd

    @property
    def expanded_high(self) -> float:
        """Upper 95 % limit of ``strain_expanded``; NaN where the SD has none."""
        return self.strain_expanded * self.high / self.strain_sd

    def keeps(self, limit: float) -> Literal["kept", "not kept", "not decided"]:
        """Whether the expanded uncertainty keeps *limit*, its 95 % interval considered."""
        if self.expanded_high <= limit:
            return "kept"
        return "not kept" if self.expanded_low > limit else "not decided"


@dataclass(frozen=True)
class EnoughFinding:
    """Which calibration effort is enough for one generation.

    ``sparing`` is the best of all efforts that spare calibrating each sensor, ``None`` where there is none;
    ``enough`` is the least effort whose expanded uncertainty keeps ``limit`` (NaN: no limit; then the least
    effort within :data:`ENOUGH_FACTOR` of a sensor's own line); ``None`` where not even the own line keeps
    it.
    """

    generation: str
    limit: float
    enough: Effort | None
    sparing: Effort | None
    own: Effort
    efforts: tuple[Effort, ...]

    @property
    def spares_decided(self) -> bool:
        """Whether the 95 % intervals too say that every effort that spares calibrating a sensor is worse."""
        if self.sparing is None:
            return False
        if math.isfinite(self.limit):
            return self.sparing.keeps(self.limit) == "not kept"
        return self.sparing.low > ENOUGH_FACTOR * self.own.high

    @property
    def enough_decided(self) -> bool:
        """Whether the interval of what is enough keeps the limit, not its estimate alone (no limit: true)."""
        if self.enough is None or not math.isfinite(self.limit):
            return self.enough is not None
        return self.enough.keeps(self.limit) == "kept"

    @property
    def none_decided(self) -> bool:
        """Whether the interval of the best effort, not its estimate alone, exceeds the limit."""
        best = min((e for e in self.efforts if math.isfinite(e.strain_sd)), key=lambda e: e.strain_sd)
        return best.keeps(self.limit) == "not kept"


@dataclass(frozen=True)
class SpreadSource:
    """One component's strain-equivalent SD at one place; ``share`` is of the variance, NaN if not stated."""

    level: str
    called: str
    sd: float
    low: float
    high: float
    share: float


@dataclass(frozen=True)
class SpreadFinding:
    """Where the spread of one generation comes from at mid range, largest first.

    ``more_than`` holds what the levels are called that the first one exceeds, the interval of the ratio
    excluding 1; empty where no such claim can be made. ``limited`` holds components of which the design gives
    an upper limit only (``sd`` is NaN).
    """

    generation: str
    place: str
    sources: tuple[SpreadSource, ...]
    more_than: tuple[str, ...]
    limited: tuple[SpreadSource, ...] = ()

    @property
    def rivals(self) -> tuple[str, ...]:
        """What may spread as much as the first: not exceeded by it, or limited to more than its SD."""
        first = self.sources[0]
        level = [s.called for s in self.sources[1:] if s.called not in self.more_than]
        return (*level, *(s.called for s in self.limited if not s.high <= first.sd))


@dataclass(frozen=True)
class LoopFinding:
    """Staircase hysteresis: the figure and how many sensors' loops are distinguishable from none."""

    figure: SensorFigure
    distinguishable: int


@dataclass(frozen=True)
class BendFinding:
    """Lack of fit: how many sensors' readings bend away from a straight line (Holm over the sensors)."""

    generation: str
    sensors: int
    bent: int
    upwards: int
    exponent: float
    exponent_low: float
    exponent_high: float


@dataclass(frozen=True)
class AccuracyFinding:
    """Reading strain with a sensor's own both-branch line: one reading and a mean of :data:`AVERAGED`.

    Both are 95 % half-widths in units of the reference, the largest over the range of each sensor.
    """

    one: SensorFigure
    mean_of_several: SensorFigure

    @property
    def averaging_helps(self) -> bool:
        """Whether the mean's half-width is at least a fifth smaller than that of one reading."""
        return self.mean_of_several.median < 0.8 * self.one.median


FindingKind = Literal[
    "rehearsal",
    "curved",
    "enough",
    "accuracy",
    "spread",
    "linearity",
    "bend",
    "repeatability",
    "hysteresis",
    "zero_return",
    "loops",
    "endurance",
    "holds",
    "zero_over_time",
    "model",
    "pressure",
    "coupling",
    "influences",
    "budget",
    "layout",
    "generations",
    "next",
]
"""What a finding is about; ``site_templates/findings/KIND.html`` has its words."""

_FIRST = {
    "rehearsal": -1,
    "curved": 0,
    "enough": 1,
    "generations": 2,
    "accuracy": 3,
    "pressure": 4,
    "budget": 5,
    "layout": 6,
}
"""What comes first, in this order: what a length is read to, what pressure adds, what shapes come back."""


@dataclass(frozen=True)
class ModelFinding:
    """Whether the model holds: efforts where prediction and leaving out disagree, bending sensor effects."""

    disagreeing: tuple[tuple[str, str], ...]
    bends: bool


@dataclass(frozen=True)
class Finding:
    """One paragraph of page 0: its kind (the template knows the words), its facts a generation, its verdict.

    ``verdict`` is that of the limit that belongs to it for new sensors, over generations: 'not met' if any
    is not met, 'met' if all are, else 'not decided'; empty where there is no limit.
    """

    kind: FindingKind
    facts: tuple[object, ...]
    verdict: str = ""
    limit: str = ""


@dataclass(frozen=True)
class Findings:
    """Scope and findings, most important first."""

    scope: Scope
    findings: tuple[Finding, ...]


def collect_findings(
    description: Description,
    intake: Intake,
    calibration: Calibration | None,
    variance: Variance | None,
    residuals: Residuals | None,
    effort: CalibrationEffort | None,
    limits: Limits,
    put_back: Calibration | None = None,
    further: Iterable[Finding] = (),
    reference: ReferenceQuantity | None = None,
    scope: Scope | None = None,
) -> Findings:
    """Choose what page 0 says.

    Parameters
    ----------
    description, intake
        The campaign as described and as read.
    calibration, variance, residuals, effort
        Analyses; ``None`` where there is nothing to analyse.
    limits
        Verdicts.
    put_back
        The calibration with every sensor that was set aside put back; ``None`` where none was or could be.
    further
        Findings of the other kinds of trial, most important first.
    reference
        What lengths are given in; that of the calibration unless given.
    scope
        What was measured, where that is known already.

    Returns
    -------
    Findings
        Only what the analyses support: a campaign without staircases has a scope and no findings.
    """
    scope = scope or describe_scope(description, intake, calibration, reference)
    findings: list[Finding] = []
    if effort is not None:
        findings += _effort_findings(effort, limits)
    if calibration is not None:
        findings += _accuracy_findings(calibration, put_back)
    if variance is not None:
        findings += _spread_findings(variance)
    if calibration is not None:
        findings += _line_findings(calibration, limits, put_back)
    findings += further
    findings += _model_findings(effort, residuals)
    findings.sort(key=lambda finding: _FIRST.get(finding.kind, len(_FIRST)))
    return Findings(scope, tuple(findings))


def verdict_of_limit(limits: Limits, name: str) -> str:
    """Return the verdict of a limit for new sensors over all generations, empty where it was not judged."""
    verdicts = set(limits.of_new_sensors().loc[lambda t: t["limit"] == name, "verdict"])
    if not verdicts:
        return ""
    return "not met" if "not met" in verdicts else "met" if verdicts == {"met"} else "not decided"


def limit_value(limits: Limits, name: str) -> float:
    """Return the value of a limit that was judged, NaN where it was not."""
    values = limits.table.loc[limits.table["limit"] == name, "value"]
    return float(values.iloc[0]) if len(values) else math.nan


def sum_up(
    figures: pd.DataFrame, limit: float, put_back: pd.DataFrame | None = None
) -> tuple[SensorFigure, ...]:
    """Sum up one figure a sensor, generation by generation.

    Parameters
    ----------
    figures
        Columns generation, module, sensor, value; rows without a value are left out.
    limit
        Threshold of the count, NaN for none (then the mean).
    put_back
        The same with the sensors that were set aside, or ``None``.

    Returns
    -------
    tuple of SensorFigure
        The mean is that of module means with Student's t on modules − 1 degrees of freedom.
    """
    known = figures.dropna(subset=["value"])
    return tuple(
        _sum_up_one(str(generation), rows, limit, _mean_of(put_back, str(generation), rows))
        for generation, rows in known.groupby("generation", sort=True)
    )


def _sum_up_one(generation: str, rows: pd.DataFrame, limit: float, put_back: float) -> SensorFigure:
    modules = rows.groupby("module")["value"].mean().to_numpy(float)
    mean = float(modules.mean())
    reach = math.nan
    if modules.size > 1:
        reach = float(
            special.stdtrit(modules.size - 1, 0.975) * modules.std(ddof=1) / math.sqrt(modules.size)
        )
    worst = rows.iloc[int(rows["value"].to_numpy(float).argmax())]
    threshold = limit if math.isfinite(limit) else mean
    return SensorFigure(
        generation=generation,
        sensors=len(rows),
        modules=modules.size,
        mean=mean,
        median=float(rows["value"].median()),
        smallest=float(rows["value"].min()),
        low=max(mean - reach, 0.0) if math.isfinite(reach) else math.nan,
        high=mean + reach,
        worst=Worst(generation, str(worst["module"]), str(worst["sensor"]), float(worst["value"])),
        threshold=threshold,
        exceeding=int((rows["value"] > threshold).sum()),
        has_limit=math.isfinite(limit),
        put_back=put_back,
    )


def _mean_of(figures: pd.DataFrame | None, generation: str, without: pd.DataFrame) -> float:
    """Mean with everything put back; NaN where that adds nothing to the figures *without* it."""
    if figures is None:
        return math.nan
    rows = figures[figures["generation"] == generation].dropna(subset=["value"])
    added = len(rows) != len(without) or not np.allclose(sorted(rows["value"]), sorted(without["value"]))
    return float(rows.groupby("module")["value"].mean().mean()) if added and len(rows) else math.nan


def _effort_findings(effort: CalibrationEffort, limits: Limits) -> list[Finding]:
    limit = limit_value(limits, "strain_error")
    facts = tuple(
        fact
        for generation, rows in effort.table.groupby("generation", sort=True)
        if (fact := choose_effort(str(generation), rows, limit)) is not None
    )
    return [Finding("enough", facts)] if facts else []


def choose_effort(generation: str, rows: pd.DataFrame, limit: float) -> EnoughFinding | None:
    """Choose the least effort that is enough among *rows*, one generation's table with least work first."""
    efforts = tuple(_effort(row) for _, row in rows.iterrows())
    known = [e for e in efforts if math.isfinite(e.strain_sd)]
    own = next((e for e in known if e.effort == "sensor"), None)
    if own is None:
        return None
    kept = [e for e in known if _is_enough(e, own, limit)]
    sparing = [e for e in known if e.effort not in OWN_LINE]
    best = min(sparing, key=lambda e: e.strain_sd) if sparing else None
    return EnoughFinding(generation, limit, kept[0] if kept else None, best, own, efforts)


def _is_enough(effort: Effort, own: Effort, limit: float) -> bool:
    if math.isfinite(limit):
        return effort.strain_expanded <= limit
    return effort.strain_sd <= ENOUGH_FACTOR * own.strain_sd


def _effort(row: pd.Series) -> Effort:
    agrees = row.get("agrees")
    return Effort(
        effort=str(row["effort"]),
        label=str(row.get("label", "") or ""),
        strain_sd=float(row["strain_sd_predicted"]),
        strain_sd_left_out=float(row["strain_sd_left_out"]),
        strain_expanded=float(row["strain_expanded"]),
        low=float(row.get("low", math.nan)),
        high=float(row.get("high", math.nan)),
        factor=float(row["factor"]),
        agrees=None if agrees is None or pd.isna(agrees) else bool(agrees),
    )


def _accuracy_findings(calibration: Calibration, put_back: Calibration | None) -> list[Finding]:
    """By the records alone: the limit of the error in use is judged by the budget."""
    parts = [
        sum_up(
            _record_figures(calibration, n),
            math.nan,
            None if put_back is None else _record_figures(put_back, n),
        )
        for n in (1, AVERAGED)
    ]
    facts = tuple(AccuracyFinding(one, several) for one, several in zip(*parts, strict=True))
    return [Finding("accuracy", facts)] if facts else []


def _record_figures(calibration: Calibration, readings: int) -> pd.DataFrame:
    rows = [
        {"generation": r.generation, "module": r.module, "sensor": r.sensor, "value": _largest(r, readings)}
        for r in principal_records(calibration.records)
    ]
    return pd.DataFrame(rows, columns=["generation", "module", "sensor", "value"])


def _largest(record: CalibrationRecord, readings: int) -> float:
    reach = [expanded_uncertainty(record, x, readings) for x in np.linspace(record.x_low, record.x_high, 11)]
    return max(reach) if all(map(math.isfinite, reach)) else math.nan


def _spread_findings(variance: Variance) -> list[Finding]:
    table = variance.variance_in_strain
    table = table[(table["place"] == "mid") & (table["generation"] != "all")]
    facts = [
        SpreadFinding(str(generation), "mid", *_sources(rows, variance.comparisons), _limited(rows))
        for generation, rows in table.groupby("generation", sort=True)
    ]
    known = tuple(fact for fact in facts if fact.sources)
    return [Finding("spread", known)] if known else []


def _sources(
    rows: pd.DataFrame, comparisons: pd.DataFrame
) -> tuple[tuple[SpreadSource, ...], tuple[str, ...]]:
    parts = rows[rows["level"] != "total"].dropna(subset=["strain_sd"])
    sources = _as_sources(parts.sort_values("strain_sd", ascending=False, kind="stable"))
    if not sources:
        return (), ()
    own = comparisons[comparisons["generation"] == rows["generation"].iloc[0]]
    own = own[(own["first"] == sources[0].level) & own["differs"].astype(bool)]
    exceeded = set(own["second"])
    return sources, tuple(s.called for s in sources[1:] if s.level in exceeded)


def _as_sources(rows: pd.DataFrame) -> tuple[SpreadSource, ...]:
    return tuple(
        SpreadSource(
            str(r["level"]), str(r["called"]), *(float(r[k]) for k in ("strain_sd", "low", "high", "share"))
        )
        for _, r in rows.iterrows()
    )


def _limited(rows: pd.DataFrame) -> tuple[SpreadSource, ...]:
    """Components without an estimate that have an upper limit."""
    return _as_sources(rows[(rows["level"] != "total") & rows["strain_sd"].isna() & rows["high"].notna()])


def _line_findings(calibration: Calibration, limits: Limits, put_back: Calibration | None) -> list[Finding]:
    findings = []
    own = limits.figures
    for kind, column in (
        ("linearity", "linearity_least_squares_percent_fso"),
        ("repeatability", "repeatability_percent_fso"),
    ):
        facts = _column_facts(calibration, column, limits, kind, put_back, own)
        if facts:
            shown = "curved" if kind == "linearity" and badly_straight(facts) else kind
            findings.append(Finding(shown, facts, verdict_of_limit(limits, kind), kind))  # type: ignore[arg-type]
    loops = _loop_facts(calibration, limits, put_back, own)
    if loops:
        other = limits.further_figures["figure"].eq("hysteresis").any()
        verdict = "" if other else verdict_of_limit(limits, "hysteresis")
        findings.append(Finding("hysteresis", loops, verdict, "hysteresis"))
    bends = _bend_facts(calibration)
    if bends:
        findings.append(Finding("bend", bends))
    returns = sum_up(_zero_returns(calibration), math.nan)
    if returns:
        findings.append(Finding("zero_return", returns))
    return findings


def badly_straight(linearity: Iterable[SensorFigure]) -> bool:
    """Return whether any generation departs from straight lines by :data:`BADLY_STRAIGHT_PERCENT_FSO`."""
    return any(figure.mean >= BADLY_STRAIGHT_PERCENT_FSO for figure in linearity)


def _column_facts(
    calibration: Calibration,
    column: str,
    limits: Limits,
    name: str,
    put_back: Calibration | None,
    own: pd.DataFrame,
) -> tuple[SensorFigure, ...]:
    figures = sum_up(
        _line_values(calibration, column),
        limit_value(limits, name),
        None if put_back is None else _line_values(put_back, column),
    )
    return tuple(_with_own_interval(figure, own[own["figure"] == name]) for figure in figures)


def _with_own_interval(figure: SensorFigure, own: pd.DataFrame) -> SensorFigure:
    """Give the figure of an only sensor the interval of that sensor."""
    rows = own[own["generation"] == figure.generation]
    if figure.sensors != 1 or len(rows) != 1:
        return figure
    return replace(figure, low=float(rows["low"].iloc[0]), high=float(rows["high"].iloc[0]))


def _line_values(calibration: Calibration, column: str) -> pd.DataFrame:
    lines = principal_lines(calibration.sensor_lines)
    return lines[["generation", "module", "sensor"]].assign(value=lines[column].astype(float))


def _loop_facts(
    calibration: Calibration, limits: Limits, put_back: Calibration | None, own: pd.DataFrame
) -> tuple[LoopFinding, ...]:
    figures = _column_facts(calibration, "hysteresis_percent_fso", limits, "hysteresis", put_back, own)
    levels = calibration.level_hysteresis
    apart = levels[(levels["low"] > 0) | (levels["high"] < 0)]
    found = apart.drop_duplicates(["generation", "module", "sensor"])["generation"].value_counts()
    return tuple(LoopFinding(figure, int(found.get(figure.generation, 0))) for figure in figures)


def _zero_returns(calibration: Calibration) -> pd.DataFrame:
    """Mean absolute zero return of each sensor's runs in %FSO."""
    runs = principal_run_lines(calibration)
    keys = ["generation", "module", "sensor"]
    values = runs.assign(value=runs["zero_return_percent_fso"].abs()).groupby(keys)["value"].mean()
    return values.reset_index()


def _bend_facts(calibration: Calibration) -> tuple[BendFinding, ...]:
    lines = principal_lines(calibration.sensor_lines)
    tested = lines.dropna(subset=["lack_of_fit_p"])
    return tuple(
        _bend_of(str(generation), rows) for generation, rows in tested.groupby("generation", sort=True)
    )


def _bend_of(generation: str, rows: pd.DataFrame) -> BendFinding:
    rejected = holm_adjusted(rows["lack_of_fit_p"].to_numpy(float)) <= 0.05
    bent = rows[rejected]
    exponents = rows["stretch_exponent"].dropna().to_numpy(float)
    known = exponents.size > 0
    return BendFinding(
        generation=generation,
        sensors=len(rows),
        bent=len(bent),
        upwards=int((bent["quadratic"] > 0).sum()),
        exponent=float(np.median(exponents)) if known else math.nan,
        exponent_low=float(exponents.min()) if known else math.nan,
        exponent_high=float(exponents.max()) if known else math.nan,
    )


def _model_findings(effort: CalibrationEffort | None, residuals: Residuals | None) -> Iterable[Finding]:
    disagreeing: tuple[tuple[str, str], ...] = ()
    if effort is not None and "agrees" in effort.table:
        rows = effort.table[effort.table["agrees"].eq(False)]
        disagreeing = tuple(zip(rows["generation"].astype(str), rows["effort"].astype(str), strict=True))
    bends = residuals is not None and residuals.bends
    return [Finding("model", (ModelFinding(disagreeing, bends),))] if disagreeing or bends else []
