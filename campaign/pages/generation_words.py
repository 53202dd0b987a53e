"""What the figures that generations are compared by are called, and their values as text."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping
from typing import Any

from campaign.pages import numbers

Row = Mapping[Hashable, Any]

FIGURE_WORDS: Mapping[str, tuple[str, str]] = {
    "strain_error": ("error of one reading (95 %)", "inverse-reading"),
    "expanded_uncertainty": ("expanded uncertainty in use", "expanded-uncertainty"),
    "node_error": ("node error after best fit", "node-error"),
    "linearity": ("departure from a line", "linearity"),
    "hysteresis": ("width of settled loops", "loops"),
    "staircase_hysteresis": ("staircase hysteresis", "hysteresis"),
    "repeatability": ("repeatability SD", "repeatability"),
    "drift_1h": ("change in 1 h at one length", "hold-time"),
    "slope_per_decade": ("change a decade of time", "slope-per-decade"),
    "pressure_sensitivity": ("apparent strain by pressure", "pressure"),
    "slope": ("slope", "line"),
    "gauge_factor": ("gauge factor", "gauge-factor"),
    "zero_signal": ("zero signal", "line"),
    "sd_module": ("SD between modules", "component-in-strain"),
    "sd_sensor": ("SD between sensors of a module", "component-in-strain"),
    "sd_mounting": ("SD between mountings", "component-in-strain"),
    "sd_session": ("SD between mountings", "component-in-strain"),
    "sd_run": ("SD between shared runs", "component-in-strain"),
    "sd_repetition": ("SD between runs", "component-in-strain"),
    "sd_sensor_by_level": ("SD of a sensor’s own shape", "component-in-strain"),
    "sd_residual": ("SD of readings of a run", "component-in-strain"),
    "sd_total": ("SD of all together", "component-in-strain"),
}
"""Figure → what it is called in sentences, and its definition on the Method page."""

VERDICT_WORDS: Mapping[str, str] = {
    "better": "better",
    "worse": "worse",
    "larger": "larger",
    "smaller": "smaller",
    "equivalent": "equivalent within the margin",
    "not decided": "not decided",
    "not tested": "compared without a test",
    "too few modules": "too few modules for a verdict",
}
"""What verdicts are called; those 'within the margin' are said as they stand."""


def figure_words(figure: str) -> str:
    """Return what a figure is called within a sentence."""
    return FIGURE_WORDS.get(figure, (figure.replace("_", " "), ""))[0]


def figure_anchor(figure: str) -> str:
    """Return the address of a figure's definition on the Method page."""
    return FIGURE_WORDS.get(figure, ("", "generations"))[1]


def verdict_words(verdict: str) -> str:
    """Return what a verdict is called on pages."""
    return VERDICT_WORDS.get(verdict, verdict)


def shown_unit(unit: str) -> tuple[float, str]:
    """Return the factor and the unit in which values of *unit* are shown (strain in %)."""
    if unit == "1":
        return 1.0, ""
    if unit == "mm/mm":
        return 100.0, "%"
    if unit.endswith("/(mm/mm)"):
        return 0.01, unit.replace("(mm/mm)", "%")
    if unit.startswith("mm/mm "):
        return 100.0, unit.replace("mm/mm", "%")
    return 1.0, unit


def estimates_words(row: Row) -> tuple[str, str]:
    """Return the values of both sides, to three digits, with their unit behind the second."""
    factor, unit = shown_unit(str(row["unit"]))
    first, second = (float(row[key]) * factor for key in ("estimate_first", "estimate_second"))
    return numbers.significant(first, 3), numbers.significant(second, 3, unit)


def comparison_words(row: Row) -> str:
    """Return ``0.49 [0.33, 0.73] times`` or ``−0.36 [−0.45, −0.28] %`` for one row of the table.

    What is compared without a test has no interval, and says so.
    """
    estimate, low, high = (float(row[key]) for key in ("difference_or_ratio", "low", "high"))
    if row["verdict"] == "not tested" and math.isfinite(estimate):
        factor, unit = (1.0, "") if row["kind"] == "ratio" else shown_unit(str(row["unit"]))
        times = " times" if row["kind"] == "ratio" else ""
        return f"{numbers.significant(estimate * factor, 2, unit)}{times} (no interval)"
    if row["kind"] == "ratio":
        if not math.isfinite(estimate):
            return numbers.NOT_IDENTIFIABLE
        return f"{numbers.interval(estimate, low, high)} times"
    factor, unit = shown_unit(str(row["unit"]))
    return numbers.interval(estimate * factor, low * factor, high * factor, unit)


def comparison_sentence(row: Row) -> str:
    """Return ``error of one reading (95 %) 2.03 → 1.67 % (0.82 [0.79, 0.86] times)``."""
    first, second = estimates_words(row)
    said = comparison_words(row)
    return f"{figure_words(str(row['figure']))} {first} → {second} ({said})"


def margin_words(row: Row) -> str:
    """Return the margin of equivalence of a row, empty where none is stated."""
    margin = float(row["margin"])
    if not math.isfinite(margin):
        return ""
    if row["kind"] == "ratio":
        return f"×{numbers.significant(1 / (1 + margin), 3)} to ×{numbers.significant(1 + margin, 3)}"
    factor, unit = shown_unit(str(row["unit"]))
    return f"±{numbers.significant(margin * factor, 3, unit)}"


def capitalised(text: str) -> str:
    """Return *text* with its first letter in upper case."""
    return text[:1].upper() + text[1:]
