"""What the components of spread are called on pages."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping
from typing import Any

from campaign.pages import numbers

_WORDS: Mapping[str, str] = {
    "batch": "batches",
    "module": "modules",
    "mounting": "mountings",
    "run": "runs",
    "run shared by the sensors of a module": "runs that a module’s sensors share",
    "sensor": "sensors of a module",
    "session": "mountings",
    "sensor × session": "a sensor’s own part of a mounting",
    "repetition": "runs",
    "sensor × run": "a sensor’s own part of a run",
    "sensor × level": "a sensor’s own shape",
    "sensor_by_level": "a sensor’s own shape",
    "sensor × direction": "a sensor’s own loop",
    "sensor_by_direction": "a sensor’s own loop",
    "residual": "readings of a run",
    "total": "all together",
}
"""What each component is called on pages."""


def level_words(called: str) -> str:
    """Return what a component is called on pages: ``modules and mountings`` for ``module + mounting``."""
    return " and ".join(_WORDS.get(part, part.replace("_", " ")) for part in called.split(" + "))


def sd_words(row: Mapping[Hashable, Any], factor: float, unit: str = "") -> str:
    """Return an SD with its interval; its upper limit alone where the design gives no more."""
    estimate, low, high = (float(row[key]) * factor for key in ("strain_sd", "low", "high"))
    if math.isnan(estimate) and math.isfinite(high):
        return f"at most {numbers.significant(high, 2, unit)}"
    if math.isfinite(estimate) and not (math.isfinite(low) and math.isfinite(high)):
        return f"{numbers.significant(estimate, 2, unit)} (interval withheld)"
    return numbers.interval(estimate, low, high, unit)
