"""What the script of the budget page computes with: coefficients of every subject.

``site_templates/js/budget.js`` turns them into U under any conditions, as
:func:`campaign.analyses.budget_model.budget_in_use` does.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import orjson

from campaign.analyses.budget import Budget
from campaign.analyses.budget_model import (
    ACROSS,
    NOT_STATED,
    PRESSURE,
    SOURCES,
    TEMPERATURE,
    BudgetPlace,
    BudgetSubject,
    Course,
    Effect,
    FixedPart,
    UseConditions,
)
from campaign.methods.uncertainty_budget import BudgetLine
from campaign.pages import slugs
from campaign.pages.page_data import script_value

DIGITS = 7
"""Significant digits of a coefficient."""


def budget_data(budget: Budget) -> dict[str, object]:
    """Return what the page's own data hold: conditions, whose budgets there are, and those of new sensors.

    Those of a module's sensors are a script of their own (:func:`budget_scripts`). Sources are numbers into
    ``sources``; what is unknown or infinite is ``None``. A line is [source, contribution, degrees of freedom,
    group, whether it is a two-point one]; an effect [value, spread, degrees of freedom, farthest, inside]; a
    course [per decade, its spread, per hour, its spread, degrees of freedom, start, farthest].
    """
    return {
        "sources": list(SOURCES),
        "subjects": [_entry(subject) for subject in budget.subjects],
        "conditions": _conditions(budget.conditions),
        "not_stated": _reasons(NOT_STATED),
        "unit": budget.reference.shown_unit,
        "factor": budget.reference.shown_factor,
    }


def budget_scripts(budget: Budget | None) -> dict[str, bytes]:
    """Return a classic script a module that hands page 11 the coefficients of its sensors, by address."""
    if budget is None:
        return {}
    modules: dict[str, list[BudgetSubject]] = {}
    for subject in budget.subjects:
        if not subject.is_new:
            modules.setdefault(subject.module, []).append(subject)
    start = b"(window.campaignBudgets = window.campaignBudgets || {})["
    made = {}
    for module, subjects in modules.items():
        content = script_value({subject.sensor: _subject(subject) for subject in subjects})
        address = script_address(module)
        made[address] = start + orjson.dumps(address) + b"] = " + content + b";\n"
    return made


def script_address(module: str) -> str:
    """Return the address of the script with the budgets of a module's sensors."""
    return f"data/budget-{slugs.module_slug(module)}.js"


def _entry(subject: BudgetSubject) -> dict[str, object]:
    """Whose budget, and its coefficients or the script that has them."""
    whose: dict[str, object] = {"name": subject.name, "module": subject.module, "sensor": subject.sensor}
    if subject.is_new:
        return whose | {"own": _subject(subject)}
    return whose | {"script": script_address(subject.module)}


def _conditions(use: UseConditions) -> dict[str, object]:
    return {
        "direction": use.direction,
        "time_s": _rounded(use.time_since_zero_s),
        "pressure_kpa": _rounded(use.pressure_kpa),
        "corrected": use.pressure_corrected,
        "range_k": _rounded(use.temperature_range_k),
        "across": _rounded(use.transverse_strain),
        "rate": _rounded(use.rate_per_s),
    }


def _subject(subject: BudgetSubject) -> dict[str, object]:
    return {
        "loop": [_rounded(subject.dynamic_half_loop), _rounded(subject.dynamic_rate_per_s)],
        "places": [_place(place) for place in subject.places],
    }


def _place(place: BudgetPlace) -> dict[str, object]:
    order = {PRESSURE: "pressure", TEMPERATURE: "temperature", ACROSS: "across"}
    return {
        "name": place.name,
        "x": _rounded(place.x),
        "fixed": {direction: _fixed(part) for direction, part in place.fixed.items()},
        "effects": {order[source]: _effect(effect) for source, effect in place.effects.items()},
        "course": _course(place.course) if place.course is not None else None,
        "missing": _reasons(place.missing),
    }


def _fixed(part: FixedPart) -> list[object]:
    groups: dict[str, int] = {}
    lines = [_line(line, groups) for line in part.lines]
    return [lines, _reasons(part.contained), _reasons(part.unknown)]


def _line(line: BudgetLine, groups: dict[str, int]) -> list[object]:
    group = groups.setdefault(line.group, len(groups) + 1) if line.group else 0
    degrees = _rounded(line.degrees_of_freedom)
    is_two_point = int(line.shape == "two-point")
    return [SOURCES.index(line.source), _rounded(line.contribution), degrees, group, is_two_point]


def _effect(effect: Effect) -> list[float | None]:
    values = (effect.value, effect.spread, effect.degrees_of_freedom, effect.farthest, effect.inside)
    return [_rounded(value) for value in values]


def _course(course: Course) -> list[float | None]:
    changes = (course.per_decade, course.per_decade_spread, course.per_hour, course.per_hour_spread)
    rest = (course.degrees_of_freedom, course.start_s, course.farthest_s)
    return [_rounded(value) for value in (*changes, *rest)]


def _reasons(found: Mapping[str, str]) -> dict[str, str]:
    return {str(SOURCES.index(source)): why for source, why in found.items()}


def _rounded(value: float) -> float | None:
    return float(f"{value:.{DIGITS}g}") if math.isfinite(value) else None
