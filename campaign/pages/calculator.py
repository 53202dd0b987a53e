"""The calculator of the sensor pages: calibration records as data for its script, and as files.

The script ``site_templates/js/calculator.js`` only evaluates what stands in a record; tests hold it to
:mod:`campaign.methods.inverse_reading`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import fields

import numpy as np
import orjson

from campaign.analyses.calibration import CalibrationRecord
from campaign.pages import slugs

CAUTION = (
    "These figures describe a sensor on a test stand. About one reading in twenty lies outside a 95 % "
    "interval. "
    "A torn electrode, a loose connector, wet skin or a hand nearby can give a plausible wrong length, and "
    "no "
    "fault detection was tested. Do not let these readings alone limit force, speed, stretch or pressure "
    "near people."
)
"""The short form of the caution that every record file carries."""

BRANCHES = ("both", "rising", "falling")
"""Order in which branches are offered."""


def record_href(record: CalibrationRecord) -> str:
    """Return the address of a record's file within the site."""
    return f"records/{slugs.sensor_slug(record.module, record.sensor)}-{record.branch}.json"


def record_fields(record: CalibrationRecord) -> dict[str, object]:
    """Return a record as plain values; numbers that are not finite become ``None``, which JSON can say."""
    return {field.name: _plain(getattr(record, field.name)) for field in fields(record)}


def record_files(records: Iterable[CalibrationRecord], origin: str = "") -> dict[str, bytes]:
    """Return one JSON file a record, by its address, with its definition of terms and the caution.

    *origin* says what the data are where nothing was measured.
    """
    return {
        record_href(record): orjson.dumps(
            {
                "caution": CAUTION,
                "model": "signal = intercept + slope x; the variance of a mean of m readings in a new run is "
                "var_intercept + 2 x cov_intercept_slope + x² var_slope + run_var_intercept + 2 x run_cov "
                "+ x² run_var_slope + lack_of_fit_variance + direction_half_width² + residual_variance / m",
                **({"origin": origin} if origin else {}),
                **record_fields(record),
            },
            option=orjson.OPT_INDENT_2 | orjson.OPT_SORT_KEYS | orjson.OPT_APPEND_NEWLINE,
        )
        for record in records
    }


def calculator_data(records: Iterable[CalibrationRecord]) -> dict[str, object]:
    """Return what the calculator's script reads: the records of one sensor, both branches first.

    What is only told of a record (files, hashes, conditions) stands in its own file.
    """
    ordered = sorted(records, key=lambda record: BRANCHES.index(record.branch))
    return {"records": [_without_told(record_fields(record)) for record in ordered]}


_TOLD = frozenset({"conditions", "date", "files", "generation", "runs", "sha256", "variance_source"})


def _without_told(record: dict[str, object]) -> dict[str, object]:
    return {key: value for key, value in record.items() if key not in _TOLD}


def _plain(value: object) -> object:
    if isinstance(value, np.integer):
        return int(value)
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in sorted(value.items())}
    if isinstance(value, (tuple, list)):
        return [_plain(v) for v in value]
    return value
