"""Is the new generation better, by how much, how sure: every headline figure of every two generations.

The module is the unit. Each generation is fitted by itself, so that they may spread differently. p values are
corrected by Holm over the whole family of figures and pairs, those of equivalence over theirs. What differs
between generations is said of the modules that were measured; its cause stays open.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np
import pandas as pd

from campaign.analyses.generation_figures import (
    FIGURES,
    FULL_SCALE,
    RANGE,
    RATE,
    SENSOR_FIGURES,
    SPREAD_FIGURES,
    Comparable,
    HeadlineFigure,
)
from campaign.analyses.generation_pairs import (
    NOT_DECIDED,
    NOT_TESTED,
    TOO_FEW_MODULES,
    Pair,
    compare_means,
    compare_spreads,
    margin_of,
    verdict_of,
)
from campaign.methods.holm import holm_adjusted
from campaign.notices import Notice
from campaign.recordings.description import Description

GENERATION_COLUMNS = (
    "figure",
    "unit",
    "first",
    "second",
    "estimate_first",
    "estimate_second",
    "difference_or_ratio",
    "kind",
    "low",
    "high",
    "df",
    "p",
    "p_adjusted",
    "verdict",
    "margin",
    "p_equivalence",
    "p_equivalence_adjusted",
    "p_common_variance",
    "modules_first",
    "modules_second",
    "sensors_first",
    "sensors_second",
    "smaller_is_better",
    "label",
)
"""Columns of :attr:`Generations.table`; the first fourteen are the table's fixed part."""

MOST_FOR_ALL_PAIRS = 4
"""Up to so many generations every two are compared; beyond, each with the newest."""

CONDITION_TOLERANCE = 0.05
"""Conditions that differ by more than this share are not the same."""


@dataclass(frozen=True)
class Source:
    """One campaign's part in the comparison: its title and what it offers, under unique names.

    ``counterpart`` is what this campaign offers over the range common to both, where it reads further than
    the earlier one that this source is.
    """

    title: str
    offers: Comparable
    counterpart: Comparable | None = None


@dataclass(frozen=True)
class Confounded:
    """Something that differs together with the generation: ``what`` names it, with what each side had."""

    what: str
    first: str
    second: str
    of_first: str
    of_second: str


@dataclass(frozen=True)
class Generations:
    """Generations compared.

    Attributes
    ----------
    names
        Generations, oldest first.
    sources
        Generation → title of its campaign.
    unit
        Unit of the reference.
    table
        One row a figure and pair, columns :data:`GENERATION_COLUMNS`. A difference is second minus first, a
        ratio second over first; ``low`` and ``high`` are 95 % limits of one comparison by itself;
        ``p_adjusted`` is Holm's over the table; ``verdict`` says of the second what is shown.
    modules
        Module means of every figure: figure, unit, generation, module, value.
    confounded
        What differs together with the generation.
    not_compared
        (figure, first, second, reason) of figures that both have and that cannot be compared.
    family
        Number of p values in the family.
    notices
        Mismatches, figures that only some have, margins that serve nothing.
    """

    names: tuple[str, ...]
    sources: Mapping[str, str]
    unit: str
    table: pd.DataFrame
    modules: pd.DataFrame
    confounded: tuple[Confounded, ...]
    not_compared: tuple[tuple[str, str, str, str], ...]
    family: int
    notices: tuple[Notice, ...]

    @property
    def decided(self) -> pd.DataFrame:
        """The rows in which something is shown."""
        return self.table[~self.table["verdict"].isin((NOT_DECIDED, NOT_TESTED, TOO_FEW_MODULES))]


def compare_generations(
    description: Description,
    sources: Sequence[Source],
    order: Sequence[str],
    confounded: Iterable[Confounded] = (),
) -> Generations | None:
    """Compare every headline figure of every two generations.

    Parameters
    ----------
    description
        Its margins of equivalence.
    sources
        The campaigns, this one last; names of generations are unique.
    order
        Generations, oldest first.
    confounded
        What is known to differ together with the generation.

    Returns
    -------
    Generations or None
        ``None`` where there are fewer than two generations with any figure.
    """
    owner = {name: source for source in sources for name in source.offers.generations}
    names = tuple(name for name in order if name in owner)
    if len(names) < 2:
        return None
    pairs: list[Pair] = []
    refused: list[tuple[str, str, str, str]] = []
    for first, second in pairs_of(names):
        for figure in FIGURES:
            made = _compare(figure, first, second, owner, description.margins)
            if isinstance(made, Pair):
                pairs.append(made)
            elif made:
                refused.append((figure.name, first, second, made))
    table = _table(pairs)
    return Generations(
        names=names,
        sources={name: owner[name].title for name in names},
        unit=sources[-1].offers.unit,
        table=table,
        modules=module_means(sources, names),
        confounded=tuple(confounded),
        not_compared=tuple(refused),
        family=int(np.isfinite(table["p_adjusted"].to_numpy(float)).sum()),
        notices=(
            *_mismatch_notices(refused),
            *_missing_notices(sources),
            *_margin_notices(description, table),
        ),
    )


def pairs_of(names: Sequence[str]) -> list[tuple[str, str]]:
    """Return the pairs that are compared, the older first in each; those with the newest first."""
    with_newest = [(name, names[-1]) for name in reversed(names[:-1])]
    if len(names) > MOST_FOR_ALL_PAIRS:
        return with_newest
    return [*with_newest, *(pair for pair in combinations(names, 2) if names[-1] not in pair)]


def _compare(
    figure: HeadlineFigure,
    first: str,
    second: str,
    owner: Mapping[str, Source],
    margins: Mapping[str, tuple[float, str]],
) -> Pair | str:
    """The comparison, or why there is none; empty where one of the two does not have the figure."""
    sides = owner[first].offers, owner[first].counterpart or owner[second].offers
    if second not in sides[1].modules:
        sides = owner[first].offers, owner[second].offers
    if figure in SPREAD_FIGURES:
        return _compare_spreads(figure, first, second, sides, margins)
    rows = [
        side.values[(side.values["figure"] == figure.name) & (side.values["generation"] == name)]
        for side, name in zip(sides, (first, second), strict=True)
    ]
    if any(part.empty for part in rows):
        return ""
    units = [str(part["unit"].iloc[0]) for part in rows]
    if units[0] != units[1]:
        return f"units differ: {units[0]} and {units[1]}"
    rows[0] = _on_one_full_scale(figure, rows[0], sides)
    if reason := _conditions_differ(figure, sides):
        return reason
    joined = pd.concat(rows, ignore_index=True)
    return compare_means(figure, joined, first, second, margin_of(figure, units[0], margins))


def _on_one_full_scale(
    figure: HeadlineFigure, rows: pd.DataFrame, sides: tuple[Comparable, Comparable]
) -> pd.DataFrame:
    """Refer per cent of the first campaign's full-scale output to the full scale of the second.

    Full-scale output is slope × full scale, so that the values change by the ratio of the two full scales.
    Only figures that do not depend on how far the sensor was stretched can be converted so.
    """
    if FULL_SCALE not in figure.conditions or RANGE in figure.conditions:
        return rows
    scales = [side.conditions.get(FULL_SCALE, math.nan) for side in sides]
    if not scales[1] > 0:
        return rows
    return rows.assign(**{name: rows[name] * scales[0] / scales[1] for name in ("value", "noise")})


def _compare_spreads(
    figure: HeadlineFigure,
    first: str,
    second: str,
    sides: tuple[Comparable, Comparable],
    margins: Mapping[str, tuple[float, str]],
) -> Pair | str:
    level = figure.name.removeprefix("sd_")
    found = [
        [s for s in side.spreads if s.generation == name and s.level == level]
        for side, name in zip(sides, (first, second), strict=True)
    ]
    if not all(found):
        return ""
    if sides[0].unit != sides[1].unit:
        return f"units differ: {sides[0].unit} and {sides[1].unit}"
    if reason := _conditions_differ(figure, sides):
        return reason
    modules = (sides[0].modules.get(first, 0), sides[1].modules.get(second, 0))
    margin = margin_of(figure, "1", margins)
    return compare_spreads(figure, (found[0][0], found[1][0]), sides[0].unit, modules, margin)


def _conditions_differ(figure: HeadlineFigure, sides: tuple[Comparable, Comparable]) -> str:
    """What of a figure's conditions differs between two campaigns, in words; empty where nothing does."""
    converted = (FULL_SCALE,) if RANGE not in figure.conditions else ()
    for name in (c for c in figure.conditions if c not in converted):
        values = [side.conditions.get(name, math.nan) for side in sides]
        apart = abs(values[0] - values[1])
        if apart > CONDITION_TOLERANCE * max(map(abs, values)):
            return f"{name} differs: {values[0]:.3g} and {values[1]:.3g} {_unit_of(name, sides[1].unit)}"
    return ""


def _unit_of(condition: str, unit: str) -> str:
    return f"{unit} a second" if condition == RATE else unit


def _table(pairs: Sequence[Pair]) -> pd.DataFrame:
    tested = [pair.found.p if pair.has_verdict else math.nan for pair in pairs]
    adjusted = holm(tested)
    equivalences = holm([pair.p_equivalence for pair in pairs])
    rows = [
        {
            "figure": pair.figure.name,
            "unit": pair.unit,
            "first": pair.first,
            "second": pair.second,
            "estimate_first": pair.estimate_first,
            "estimate_second": pair.estimate_second,
            "difference_or_ratio": pair.found.estimate,
            "kind": pair.kind,
            "low": pair.found.low,
            "high": pair.found.high,
            "df": pair.found.degrees_of_freedom,
            "p": p,
            "p_adjusted": p_adjusted,
            "verdict": verdict_of(pair, p_adjusted, equivalence),
            "margin": pair.margin,
            "p_equivalence": pair.p_equivalence,
            "p_equivalence_adjusted": equivalence,
            "p_common_variance": pair.p_common_variance,
            "modules_first": pair.modules[0],
            "modules_second": pair.modules[1],
            "sensors_first": pair.sensors[0],
            "sensors_second": pair.sensors[1],
            "smaller_is_better": pair.figure.smaller_is_better,
            "label": "; ".join(filter(None, (pair.untested, pair.label))),
        }
        for pair, p, p_adjusted, equivalence in zip(pairs, tested, adjusted, equivalences, strict=True)
    ]
    return pd.DataFrame(rows, columns=list(GENERATION_COLUMNS))


def holm(p_values: Sequence[float]) -> list[float]:
    """Return p values corrected by Holm's rule; those that are NaN take no part and stay so."""
    values = np.asarray(p_values, dtype=float)
    known = np.isfinite(values)
    adjusted = np.full(values.shape, math.nan)
    if known.any():
        adjusted[known] = holm_adjusted(values[known])
    return [float(p) for p in adjusted]


def module_means(sources: Iterable[Source], names: Sequence[str]) -> pd.DataFrame:
    """Return the mean of every figure and module, generations in the order of *names*.

    Where all generations share positions, the means are over those alone, as in the comparison.
    """
    parts = [source.offers.values for source in sources if len(source.offers.values)]
    if not parts:
        return pd.DataFrame(columns=["figure", "unit", "generation", "module", "value"])
    values = _at_positions_of_all(pd.concat(parts, ignore_index=True))
    means = (
        values.groupby(["figure", "unit", "generation", "module"], sort=True)["value"].mean().reset_index()
    )
    rank = {name: place for place, name in enumerate(names)}
    figures = {figure.name: place for place, figure in enumerate(SENSOR_FIGURES)}
    means = means.assign(_figure=means["figure"].map(figures), _rank=means["generation"].map(rank))
    ordered = means.sort_values(["_figure", "_rank", "module"], kind="stable")
    return ordered.drop(columns=["_figure", "_rank"]).reset_index(drop=True)


def _at_positions_of_all(values: pd.DataFrame) -> pd.DataFrame:
    """Rows at the positions that all generations of a figure have; all its rows where there is none."""
    generations = values.groupby("figure")["generation"].transform("nunique")
    shared = values.groupby(["figure", "position"])["generation"].transform("nunique") == generations
    kept = shared | ~shared.groupby(values["figure"]).transform("any")
    return values[kept]


def _mismatch_notices(refused: Iterable[tuple[str, str, str, str]]) -> Iterator[Notice]:
    by_reason: dict[tuple[str, str, str], list[str]] = {}
    for figure, first, second, reason in refused:
        by_reason.setdefault((first, second, reason), []).append(_spoken(figure))
    for (first, second, reason), figures in by_reason.items():
        yield Notice(
            "earlier-differs",
            "noted",
            None,
            None,
            None,
            f"{first} and {second}: {reason}",
            f"not compared: {', '.join(figures)}",
            "measure both alike, or state a common [range] that both reach",
            len(figures),
        )


def _spoken(figure: str) -> str:
    """A figure in words: ``SD sensor by level``, ``drift in 1 h``."""
    words = figure.replace("_1h", "_in_1_h").replace("_", " ")
    return f"SD {words[3:]}" if words.startswith("sd ") else words


def _missing_notices(sources: Sequence[Source]) -> Iterator[Notice]:
    """Figures that this campaign has and an earlier one lacks, or the other way round."""
    own = set(sources[-1].offers.values["figure"])
    for source in sources[:-1]:
        theirs = set(source.offers.values["figure"])
        for lacking, figures in ((source.title, own - theirs), (sources[-1].title, theirs - own)):
            if figures:
                names = [_spoken(f.name) for f in SENSOR_FIGURES if f.name in figures]
                what = f"{lacking} has no {', '.join(names)}"
                yield Notice(
                    "earlier-differs", "noted", None, None, None, what, "not compared", "", len(names)
                )


def _margin_notices(description: Description, table: pd.DataFrame) -> Iterator[Notice]:
    used = set(table.loc[table["margin"].notna(), "figure"])
    known = {figure.name: figure for figure in FIGURES}
    untested = set(table.loc[table["verdict"] == NOT_TESTED, "figure"])
    for name, (value, unit) in description.margins.items():
        if name in used:
            continue
        if name in untested:
            reason = "it is compared without a test"
        elif name in set(table["figure"]):
            reason = f"the unit {unit or '1'} does not fit"
        else:
            reason = "it was not compared" if name in known else "no figure has this name"
        what = f"[limits.margins] {name} = {value:g} {unit}: {reason}"
        remedy = f"figures are {', '.join(sorted(n for n, figure in known.items() if not figure.is_pooled))}"
        yield Notice("margin-not-used", "noted", None, None, None, what, "no equivalence is tested", remedy)
