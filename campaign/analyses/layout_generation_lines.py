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


PART_OF_IT = "sensors read by the mean line are among those that it is the mean of: a new one would err more"


@dataclass(frozen=True)
class MeanLine:
    """The mean line of a generation at one position.

    Attributes
    ----------
    intercept, slope
        Signal units, and per unit of x.
    lack_of_fit
        Root mean square of the level means about the line, signal units.
    half_loop
        Root mean square of half the mean difference of branches, signal units.
    """

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
    return combined(lengths, iter([*parts, *shared, *last]), (low, high), {"mean_line": PART_OF_IT})


def _parts(
    table: pd.DataFrame, fit: GenerationFit, lines: list[MeanLine | None], x: FloatArray, per_mm: FloatArray
) -> Iterator[SharedPart]:
    """What the fit says: every component of spread, of the sensors read and of those that make the mean."""
    places = np.nan_to_num(np.column_stack([np.ones_like(x), x]))
    shares = _shares_of_sensors(table, fit)
    for name, members in (*_of_mean(shares), *_of_run(table)):
        if name in fit.covariances:
            covariance = fit.covariances[name]
            factors = per_mm[:, None] * (places[:, : len(covariance)] @ _root(covariance))
            yield SharedPart(name, factors, members=members)
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


@dataclass(frozen=True)
class _Shares:
    """How the sensors of a campaign enter the error of every row.

    Attributes
    ----------
    sensors
        Columns batch, module, sensor, runs, mountings: the calibrated sensors, then those only laid out.
    own, mean
        Shape (N, sensors): the row's sensor; and the sensors whose mean the line is.
    """

    sensors: pd.DataFrame
    own: FloatArray
    mean: FloatArray


def _shares_of_sensors(table: pd.DataFrame, fit: GenerationFit) -> _Shares:
    """A row errs by what its sensor departs from the mean of those at its position, itself among them.

    The mean line counts every sensor alike, as it does in a balanced design.
    """
    readings = fit.model.readings
    runs = readings[["session", "trial", "repetition"]].astype(str).agg("|".join, axis=1)
    known = (
        readings.assign(run=runs)
        .groupby(["batch", "module", "sensor", "position"], sort=True)
        .agg(runs=("run", "nunique"), mountings=("session", "nunique"))
        .reset_index()
    )
    new = table[["batch", "module", "sensor", "position"]].drop_duplicates(["module", "sensor"])
    listed = set(zip(known["module"], known["sensor"], strict=True))
    new = new[[(m, s) not in listed for m, s in zip(new["module"], new["sensor"], strict=True)]]
    sensors = pd.concat([known, new.assign(runs=0, mountings=0)], ignore_index=True)
    same = (table["module"].to_numpy()[:, None] == sensors["module"].to_numpy()) & (
        table["sensor"].to_numpy()[:, None] == sensors["sensor"].to_numpy()
    )
    counted = np.broadcast_to(sensors["runs"].to_numpy() > 0, same.shape)
    if fit.model.counts.position_terms > 0:
        counted = counted & (table["position"].to_numpy()[:, None] == sensors["position"].to_numpy())
    mean = counted / np.maximum(counted.sum(axis=1, keepdims=True), 1)
    return _Shares(sensors, same.astype(np.float64), mean)


def _of_mean(shares: _Shares) -> Iterator[tuple[str, FloatArray]]:
    """Members of what sensors keep from trial to trial, and of what the mean has from its runs."""
    away = shares.own - shares.mean
    units = {"batch": ["batch"], "module": ["batch", "module"], "sensor": ["batch", "module", "sensor"]}
    for name, columns in units.items():
        codes = codes_of(shares.sensors, columns)
        yield name, away @ np.eye(int(codes.max()) + 1)[codes]
    module = np.eye(len(shares.sensors))[codes_of(shares.sensors, ["batch", "module"])]
    for shared, single, count in (("mounting", "session", "mountings"), ("run", "repetition", "runs")):
        several = 1.0 / np.sqrt(np.maximum(shares.sensors[count].to_numpy(float), 1.0))
        yield shared, (shares.mean * several) @ module
        yield single, shares.mean * several


def _of_run(table: pd.DataFrame) -> Iterator[tuple[str, FloatArray]]:
    """Members of what the run and mounting of the layout trial itself add."""
    mounting, run = mounting_columns(table), ["module", "trial", "repetition"]
    for name, columns in (
        ("mounting", mounting),
        ("run", run),
        ("session", [*mounting, "sensor"]),
        ("repetition", [*run, "sensor"]),
    ):
        codes = codes_of(table, columns)
        yield name, np.eye(int(codes.max()) + 1)[codes]


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
