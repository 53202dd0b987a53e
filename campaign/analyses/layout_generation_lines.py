"""Lengths read in layout trials by the mean line of a generation, with the whole of their covariance.

The mean line is that of the nested fit at the sensor's position, where positions are told apart. A sensor
then errs by what it, its module and its batch depart from the mean, besides the run: all of it from the
components of spread, each shared by what has it in common.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.layout_lengths import (
    LengthReadings,
    SharedPart,
    codes_of,
    combined,
    into_length,
    mounting_columns,
    reference_parts,
)
from campaign.analyses.variance_fit import GenerationFit
from campaign.recordings.description import Description

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class MeanLine:
    """The mean line of a generation at one position.

    Attributes
    ----------
    weights
        Shape (2, p): intercept and slope as linear functions of the fixed coefficients.
    intercept, slope
        Signal units, and per unit of x.
    lack_of_fit
        Root mean square of the level means about the line, signal units.
    half_loop
        Root mean square of half the mean difference of branches, signal units.
    """

    weights: FloatArray
    intercept: float
    slope: float
    lack_of_fit: float
    half_loop: float


def mean_lines(fit: GenerationFit) -> dict[str, MeanLine]:
    """Return the mean line at every position of one generation; the same at all where none is told apart."""
    positions = fit.model.readings["position"].astype(str).to_numpy()
    x = fit.model.readings["x"].to_numpy(float)
    apart = fit.model.counts.position_terms > 0
    found = {}
    for position in np.unique(positions):
        rows = positions == position if apart else np.ones(len(positions), dtype=bool)
        found[str(position)] = _mean_line(fit, rows, x[rows])
    return found


def _mean_line(fit: GenerationFit, rows: npt.NDArray[np.bool_], x: FloatArray) -> MeanLine:
    columns = fit.model.fixed.columns[rows].copy()
    branches = fit.model.fixed.of_group("direction")
    coefficients = fit.fit.coefficients
    loop = columns[:, branches] @ coefficients[branches]
    columns[:, branches] = 0.0
    design = np.column_stack([np.ones_like(x), x])
    weights = np.asarray(np.linalg.lstsq(design, columns, rcond=None)[0], dtype=np.float64)
    line = weights @ coefficients
    departure = columns @ coefficients - design @ line
    return MeanLine(
        weights,
        float(line[0]),
        float(line[1]),
        float(np.sqrt(np.mean(departure**2))),
        float(np.sqrt(np.mean(loop**2))),
    )


def read_by_generation_line(
    table: pd.DataFrame,
    calibration: Calibration,
    fit: GenerationFit,
    description: Description,
    temperature: FloatArray,
) -> LengthReadings:
    """Read the lengths of one generation by its mean line.

    Parameters
    ----------
    table
        N rows of signals, columns of :data:`campaign.analyses.layout_signals.SIGNAL_COLUMNS`.
    calibration
        What x is, and what the stand recorded.
    fit
        The nested fit of the generation.
    description
        Uncertainties of the reference.
    temperature
        Shape (N,): what one standard uncertainty of temperature does to each length, in mm.
    """
    known = mean_lines(fit)
    lines = [known.get(str(position)) for position in table["position"]]
    intercept = np.array([line.intercept if line is not None else np.nan for line in lines])
    slope = np.array([line.slope if line is not None else np.nan for line in lines])
    x = (table["signal"].to_numpy(float) - intercept) / slope
    rest = table["rest_length_mm"].to_numpy(float)
    lengths, per_x = into_length(x, rest, calibration.reference.name)
    per_mm = per_x / slope
    seen = fit.model.readings["x"].to_numpy(float)
    low, high = (
        into_length(np.full_like(x, end), rest, calibration.reference.name)[0]
        for end in (float(seen.min()), float(seen.max()))
    )
    parts = _parts(table, fit, lines, x, per_mm)
    shared = _reference(table, lengths, x, calibration, description)
    run = codes_of(table, ["module", "trial", "repetition"])
    last = [SharedPart("temperature", temperature[:, None], run)]
    return combined(lengths, iter([*parts, *shared, *last]), (low, high), {})


def _parts(
    table: pd.DataFrame, fit: GenerationFit, lines: list[MeanLine | None], x: FloatArray, per_mm: FloatArray
) -> Iterator[SharedPart]:
    """What the fit says: the mean line itself, and every component of spread."""
    everywhere = np.zeros(len(table), dtype=np.int64)
    root = _root(fit.fit.coefficient_covariance)
    weights = np.zeros((len(table), len(root)))
    for k, line in enumerate(lines):
        if line is not None and np.isfinite(x[k]):
            weights[k] = (line.weights[0] + x[k] * line.weights[1]) @ root
    yield SharedPart("mean line", per_mm[:, None] * weights, everywhere)
    for name, codes in _shared_by(table).items():
        if name in fit.covariances:
            covariance = fit.covariances[name]
            places = np.column_stack([np.ones_like(x), x])[:, : len(covariance)]
            yield SharedPart(name, per_mm[:, None] * (np.nan_to_num(places) @ _root(covariance)), codes)
    for name, share in (("sensor_by_level", 1.0), ("sensor_by_direction", 0.5)):
        if name in fit.covariances:
            sd = share * float(np.sqrt(fit.covariances[name][0, 0]))
            yield SharedPart(name.replace("_", " "), sd * per_mm[:, None])
    lack = np.array([line.lack_of_fit if line is not None else np.nan for line in lines])
    loop = np.array([line.half_loop if line is not None else np.nan for line in lines])
    yield SharedPart("lack of fit", (per_mm * lack)[:, None])
    yield SharedPart("direction", (per_mm * loop)[:, None])
    own = np.fmax(np.sqrt(fit.residual_variance), table["standard_error"].to_numpy(float))
    yield SharedPart("noise", (per_mm * own)[:, None])


def _shared_by(table: pd.DataFrame) -> dict[str, IntArray]:
    """Codes of the units that have each component of spread in common."""
    mounting, run = mounting_columns(table), ["module", "trial", "repetition"]
    return {
        "batch": codes_of(table, ["batch"]),
        "module": codes_of(table, ["module"]),
        "mounting": codes_of(table, mounting),
        "run": codes_of(table, run),
        "sensor": codes_of(table, ["module", "sensor"]),
        "session": codes_of(table, [*mounting, "sensor"]),
        "repetition": codes_of(table, [*run, "sensor"]),
    }


def _root(covariance: FloatArray) -> FloatArray:
    """A factor F with F F' equal to a covariance that may be singular."""
    values, vectors = np.linalg.eigh(covariance)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))


def _reference(
    table: pd.DataFrame,
    lengths: FloatArray,
    x: FloatArray,
    calibration: Calibration,
    description: Description,
) -> Iterator[SharedPart]:
    """The reference, and the rest length that turns strain into length.

    The zero of the mean line is the mean of as many zeros as there were mountings.
    """
    for part in reference_parts(table, lengths, calibration, description):
        if part.name not in ("rest length", "zero"):
            yield part
    everywhere = np.zeros(len(table), dtype=np.int64)
    mountings = max(calibration.run_lines[["module", "session"]].drop_duplicates().shape[0], 1)
    zero = description.length_reference.zero_mm
    if zero > 0:
        yield SharedPart("zero", np.full((len(table), 1), zero / np.sqrt(mountings)), everywhere)
    if calibration.reference.name != "length":
        lever = 1.0 + x if calibration.reference.name == "strain" else np.ones_like(x)
        uncertain = np.nan_to_num(table["rest_length_uncertainty_mm"].to_numpy(float))
        yield SharedPart("rest length", (lever * uncertain)[:, None], codes_of(table, ["module", "sensor"]))
