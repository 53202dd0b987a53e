"""Lengths read in layout trials by each sensor's own line, with the whole of their covariance.

Two lengths err together where they share what makes them err: the line of a sensor (its placements), the runs
and mountings that carried several sensors, the scale and zero of the reference, the temperature. Every part
is a set of factors F with codes of what shares it: it adds F F' between rows of equal code. The noise of a
reading, lack of fit and the unknown direction of approach are each row's own. Strain is read first; the rest
length then cancels wherever lengths were recorded, so its uncertainty enters only where they were not (GUM
5.2, F.1.2.3).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.variance_fit import GenerationFit
from campaign.recordings.description import Description
from campaign.units import UnitError, parse_quantity

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration, CalibrationRecord
    from campaign.analyses.line_sources import LineSources

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

SHARED_TERMS = ("mounting", "run")
OWN_TERMS = ("session", "repetition")
"""Components of spread that the sensors of a module share in a run, and those that each has for itself."""

SMALLEST_MM = 1e-6
"""Added to every length's SD: lengths without any noise would have no inverse covariance."""

BEYOND = 2.0
"""A length is outside calibration where it lies beyond the range by more than so many of its SDs."""


@dataclass(frozen=True)
class SharedPart:
    """One part of the error of N lengths.

    Attributes
    ----------
    name
        What it is.
    factors
        Shape (N, q), in mm.
    codes
        Shape (N,): rows of equal code share it; ``None`` for what is each row's own.
    members
        Instead of codes, shape (N, units): how much of the error of every unit a row has, where it is not
        just that of its own.
    """

    name: str
    factors: FloatArray
    codes: IntArray | None = None
    members: FloatArray | None = None

    def covariance(self) -> FloatArray:
        """Return what the part adds to the covariance, shape (N, N)."""
        if self.members is not None:
            return np.asarray((self.members @ self.members.T) * (self.factors @ self.factors.T))
        if self.codes is None:
            return np.diag(np.sum(self.factors**2, axis=1))
        return np.asarray((self.codes[:, None] == self.codes[None, :]) * (self.factors @ self.factors.T))


@dataclass(frozen=True)
class LengthReadings:
    """Lengths of N rows of signals, read by one choice of lines.

    Attributes
    ----------
    lengths_mm
        Shape (N,): NaN where there is no line or the signal lies outside calibration.
    covariance_mm2
        Shape (N, N); rows without a length are 0.
    parts
        Variance of each row by part, shape (N,) by name: where the covariance comes from.
    outside
        Shape (N,): whether a row lies outside calibration.
    labels
        What must be read with the covariance, by short name.
    """

    lengths_mm: FloatArray
    covariance_mm2: FloatArray
    parts: dict[str, FloatArray]
    outside: npt.NDArray[np.bool_]
    labels: dict[str, str] = field(default_factory=dict)


def combined(
    lengths: FloatArray,
    parts: Iterator[SharedPart],
    limits: tuple[FloatArray, FloatArray],
    labels: dict[str, str],
) -> LengthReadings:
    """Add up the parts, and take out the lengths beyond their *limits* (N,) each, in mm."""
    count = len(lengths)
    covariance = np.zeros((count, count))
    variances: dict[str, FloatArray] = {}
    for part in parts:
        clean = SharedPart(part.name, np.nan_to_num(part.factors), part.codes, part.members)
        added = clean.covariance()
        covariance += added
        variances[part.name] = variances.get(part.name, np.zeros(count)) + np.diag(added)
    covariance += SMALLEST_MM**2 * np.eye(count)
    reach = BEYOND * np.sqrt(np.diag(covariance))
    outside = (lengths < limits[0] - reach) | (lengths > limits[1] + reach)
    known = np.isfinite(lengths) & ~outside
    covariance *= np.outer(known, known)
    return LengthReadings(np.where(known, lengths, np.nan), covariance, variances, outside, labels)


def codes_of(table: pd.DataFrame, columns: list[str]) -> IntArray:
    """Return one code a combination of *columns*."""
    return np.asarray(table.groupby(columns, sort=True, dropna=False).ngroup(), dtype=np.int64)


def mounting_columns(table: pd.DataFrame) -> list[str]:
    """Return what names a mounting: the session where recorded, else the run itself."""
    recorded = bool((table["session"].astype(str) != "").all())
    return ["module", "session"] if recorded else ["module", "trial", "repetition"]


def shared_share(fit: GenerationFit | None) -> float:
    """Return the share of the variance between runs, at mid range, that sensors of one run have in common."""
    if fit is None:
        return 0.0
    place = np.array([1.0, fit.places["mid"]])

    def total(names: tuple[str, ...]) -> float:
        found = [fit.covariances[name] for name in names if name in fit.covariances]
        return sum(float(place[: len(c)] @ c @ place[: len(c)]) for c in found)

    shared, own = total(SHARED_TERMS), total(OWN_TERMS)
    return shared / (shared + own) if shared + own > 0 else 0.0


@dataclass(frozen=True)
class OwnLines:
    """The line of every row's sensor: arrays of shape (N,), NaN where a sensor has none.

    ``per_mm`` is mm per signal unit, ``x`` the reference read, ``recorded`` what the stand recorded.
    """

    records: list[CalibrationRecord | None]
    sources: list[LineSources | None]
    x: FloatArray
    lengths: FloatArray
    per_mm: FloatArray


def read_by_own_lines(
    table: pd.DataFrame,
    calibration: Calibration,
    fit: GenerationFit | None,
    description: Description,
    temperature: FloatArray,
) -> LengthReadings:
    """Read the lengths of one generation by its sensors' own lines.

    Parameters
    ----------
    table
        N rows of signals, columns of :data:`campaign.analyses.layout_signals.SIGNAL_COLUMNS`.
    calibration
        The sensors' lines: that of both branches, else the only one.
    fit
        The nested fit of the generation, which says what sensors of a shared run have in common.
    description
        Uncertainties of the reference.
    temperature
        Shape (N,): what one standard uncertainty of temperature does to each length, in mm.
    """
    lines = _lines_of_rows(table, calibration)
    share = shared_share(fit)
    parts = _own_parts(table, lines, calibration, share, description, temperature)
    low, high = (_ends(lines, name) for name in ("x_low", "x_high"))
    return combined(lines.lengths, parts, (low, high), _labels(lines, share))


def _lines_of_rows(table: pd.DataFrame, calibration: Calibration) -> OwnLines:
    records: dict[tuple[str, str, str], CalibrationRecord] = {}
    for record in calibration.records:
        records.setdefault((record.generation, record.module, record.sensor), record)
    sources = {(*source.key, source.branch): source for source in calibration.line_sources}
    keys = list(zip(table["generation"], table["module"], table["sensor"], strict=True))
    own = [records.get(key) for key in keys]
    found = [sources.get((*k, r.branch)) if r is not None else None for k, r in zip(keys, own, strict=True)]
    intercept = np.array([r.intercept if r is not None else np.nan for r in own])
    slope = np.array([r.slope if r is not None else np.nan for r in own])
    x = (table["signal"].to_numpy(float) - intercept) / slope
    rest = np.array([r.rest_length_mm if r is not None else np.nan for r in own])
    lengths, per_x = into_length(x, rest, calibration.reference.name)
    return OwnLines(own, found, x, lengths, per_x / slope)


def into_length(x: FloatArray, rest: FloatArray, reference: str) -> tuple[FloatArray, FloatArray]:
    """Return lengths in mm of the reference values *x*, and mm per unit of x, shape (N,) each."""
    if reference == "length":
        return x, np.ones_like(x)
    if reference == "elongation":
        return rest + x, np.ones_like(x)
    return rest * (1.0 + x), rest


def _ends(lines: OwnLines, name: str) -> FloatArray:
    """Ends of the calibrated range as lengths."""
    ends = np.array([getattr(r, name) if r is not None else np.nan for r in lines.records])
    rest = np.array([r.rest_length_mm if r is not None else np.nan for r in lines.records])
    reference = next((r.reference_name for r in lines.records if r is not None), "strain")
    return into_length(ends, rest, reference)[0]


def _labels(lines: OwnLines, share: float) -> dict[str, str]:
    labels = {}
    unknown = sum(s is not None and not np.isfinite(s.run).all() for s in lines.sources)
    if unknown:
        labels["runs"] = "run-to-run error unknown for sensors with one run: uncertainty is a lower bound"
    if share > 0:
        labels["shared_parts"] = f"sensors of one run share {100 * share:.0f} % of the variance between runs"
    return labels


def _own_parts(
    table: pd.DataFrame,
    lines: OwnLines,
    calibration: Calibration,
    share: float,
    description: Description,
    temperature: FloatArray,
) -> Iterator[SharedPart]:
    """Every part of the error of lengths read by own lines."""
    sensor, module = codes_of(table, ["module", "sensor"]), codes_of(table, ["module"])
    mounting = mounting_columns(table)
    run = ["module", "trial", "repetition"]
    for name, columns, own in (
        ("line", [], sensor),
        ("mounting", mounting, codes_of(table, [*mounting, "sensor"])),
        ("run", run, codes_of(table, [*run, "sensor"])),
    ):
        factors = _line_factors(lines, name)
        shared = codes_of(table, columns) if columns else module
        yield SharedPart(name, np.sqrt(1.0 - share) * factors, own)
        yield SharedPart(name, np.sqrt(share) * factors, shared)
    yield from reference_parts(table, lines.lengths, calibration, description)
    yield SharedPart("temperature", temperature[:, None], codes_of(table, ["module", "trial", "repetition"]))
    yield SharedPart("lack of fit", _row_factors(lines, "lack_of_fit"))
    loop = np.array([s.half_loop if s is not None else np.nan for s in lines.sources])
    yield SharedPart("direction", (lines.per_mm * loop)[:, None])
    own_error = np.abs(lines.per_mm) * table["standard_error"].to_numpy(float)
    noise = np.fmax(_row_factors(lines, "noise")[:, 0], own_error)
    yield SharedPart("noise", noise[:, None])


def _row_factors(lines: OwnLines, name: str) -> FloatArray:
    """SD of each row in mm by a variance of its line, shape (N, 1)."""
    variance = np.array([getattr(s, name) if s is not None else np.nan for s in lines.sources])
    return np.asarray(np.abs(lines.per_mm * np.sqrt(np.maximum(variance, 0.0))))[:, None]


def _line_factors(lines: OwnLines, name: str) -> FloatArray:
    """Factors (N, 2) in mm of a covariance of intercept and slope, about the middle of each line's range."""
    factors = np.full((len(lines.x), 2), np.nan)
    for k, source in enumerate(lines.sources):
        if source is None or not np.isfinite(getattr(source, name)).all():
            continue
        middle = (source.x_low + source.x_high) / 2.0
        centred = _about(getattr(source, name), middle)
        factors[k] = lines.per_mm[k] * (np.array([1.0, lines.x[k] - middle]) @ _root(centred))
    return factors


def _about(covariance: FloatArray, middle: float) -> FloatArray:
    """Covariance of (value at *middle*, slope) from that of (intercept, slope)."""
    change = np.array([[1.0, middle], [0.0, 1.0]])
    return np.asarray(change @ covariance @ change.T)


def _root(covariance: FloatArray) -> FloatArray:
    """Lower factor of a covariance of two, which may be singular."""
    first = np.sqrt(max(float(covariance[0, 0]), 0.0))
    across = float(covariance[1, 0]) / first if first > 0 else 0.0
    return np.array([[first, 0.0], [across, np.sqrt(max(float(covariance[1, 1]) - across**2, 0.0))]])


# --- the reference


def reference_parts(
    table: pd.DataFrame, lengths: FloatArray, calibration: Calibration, description: Description
) -> Iterator[SharedPart]:
    """Yield what the uncertainty of the reference during calibration does to lengths read by it.

    Scale and backlash are common to the campaign, the zero to a mounting (a sensor's line holds each mounting
    by its share of the runs), the rest length to a sensor.
    """
    stated = description.length_reference
    everywhere = np.zeros(len(table), dtype=np.int64)
    recorded = _recorded(table, calibration)
    rest = table["rest_length_mm"].to_numpy(float)
    travel = np.where(recorded == "length", lengths, lengths - rest)
    if stated.scale_relative > 0:
        yield SharedPart("scale", (stated.scale_relative * travel)[:, None], everywhere)
    if stated.zero_mm > 0:
        yield SharedPart(
            "zero", stated.zero_mm * _session_shares(table, calibration), codes_of(table, ["module"])
        )
    if stated.backlash_mm > 0:
        yield SharedPart(
            "backlash", 0.5 * stated.backlash_mm * _approach(table, calibration)[:, None], everywhere
        )
    uncertain = np.nan_to_num(table["rest_length_uncertainty_mm"].to_numpy(float))
    lever = np.select([recorded == "elongation", recorded == "strain"], [1.0, lengths / rest], 0.0)
    yield SharedPart("rest length", (lever * uncertain)[:, None], codes_of(table, ["module", "sensor"]))


def _recorded(table: pd.DataFrame, calibration: Calibration) -> npt.NDArray[np.str_]:
    """What the stand recorded when each row's sensor was calibrated: length, elongation or strain."""
    readings = calibration.readings
    if "reference" not in readings:
        return np.full(len(table), "length")
    first = readings.drop_duplicates(["generation", "module", "sensor"])
    known = {
        (g, m, s): str(r)
        for g, m, s, r in zip(
            *(first[c] for c in ("generation", "module", "sensor", "reference")), strict=True
        )
    }
    keys = zip(table["generation"], table["module"], table["sensor"], strict=True)
    return np.array([known.get(key, "length") for key in keys])


def _session_shares(table: pd.DataFrame, calibration: Calibration) -> FloatArray:
    """Share of each mounting in the runs of each row's sensor, shape (N, mountings)."""
    keys_of_runs = ["generation", "module", "sensor", "session", "repetition", "trial"]
    runs = calibration.run_lines.drop_duplicates(keys_of_runs)
    sessions = sorted(set(runs["session"].astype(str)))
    counts = runs.groupby(["generation", "module", "sensor", "session"]).size()
    shares = np.zeros((len(table), len(sessions)))
    keys = list(zip(table["generation"], table["module"], table["sensor"], strict=True))
    for at, session in enumerate(sessions):
        shares[:, at] = [float(counts.get((*key, session), 0)) for key in keys]
    total = shares.sum(axis=1, keepdims=True)
    return np.asarray(np.divide(shares, total, out=np.zeros_like(shares), where=total > 0))


def _approach(table: pd.DataFrame, calibration: Calibration) -> FloatArray:
    """+1 and −1 for lines of one branch only, 0 for both: then backlash cancels."""
    sign = {"rising": 1.0, "falling": -1.0}
    branch: dict[tuple[str, str, str], float] = {}
    for record in calibration.records:
        branch.setdefault((record.generation, record.module, record.sensor), sign.get(record.branch, 0.0))
    keys = zip(table["generation"], table["module"], table["sensor"], strict=True)
    return np.array([branch.get(key, 0.0) for key in keys])


# --- temperature


def temperature_factors(
    table: pd.DataFrame,
    calibration: Calibration,
    coefficients: pd.DataFrame | None,
    description: Description,
) -> tuple[FloatArray, str]:
    """Return what one standard uncertainty of temperature does to each length, in mm, and what is to be said.

    The temperature of a placement against that of its sensor's calibration is not corrected for, so the whole
    difference counts as a standard uncertainty (GUM F.2.4.5); where none was recorded with the placement, the
    range of use counts, as a rectangular distribution.

    Parameters
    ----------
    table, calibration, description
        As for :func:`read_by_own_lines`.
    coefficients
        generation, module, sensor, strain_equivalent (per kelvin), or ``None`` where none was measured.
    """
    none = np.zeros(len(table))
    if coefficients is None or coefficients.empty or calibration.reference.name != "strain":
        return none, "what temperature does to the signals is not measured: it is in no ellipse"
    keys = ["generation", "module", "sensor"]
    per_kelvin = coefficients.drop_duplicates(keys).set_index(keys)["strain_equivalent"]
    known = per_kelvin.reindex(pd.MultiIndex.from_frame(table[keys])).to_numpy(float)
    usual = per_kelvin.groupby(level=0).mean().reindex(table["generation"]).to_numpy(float)
    apparent = np.where(np.isfinite(known), known, usual)
    used = calibration.readings[calibration.readings["used"].astype(bool)]
    means = used.groupby(keys)["temperature_c"].mean().reindex(pd.MultiIndex.from_frame(table[keys]))
    difference = table["temperature_c"].to_numpy(float) - means.to_numpy(float)
    kelvin = np.where(np.isfinite(difference), difference, _range_in_use(description))
    factors = np.nan_to_num(apparent * kelvin * table["rest_length_mm"].to_numpy(float))
    return factors, "temperature against that of calibration is in the ellipses, not corrected for"


def _range_in_use(description: Description) -> float:
    text = description.use.get("temperature_range", "")
    try:
        width = parse_quantity(text, ("temperature difference",)).value if text else 0.0
    except UnitError:
        return 0.0
    return float(width / np.sqrt(12.0))
