"""One headline figure of two generations: difference or ratio, equivalence, and what may be said of it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.generation_figures import HeadlineFigure, Kind, Spread
from campaign.methods.equivalence import (
    difference_of_spreads,
    equivalence_of_difference,
    equivalence_of_ratio,
    equivalence_of_spreads,
)
from campaign.methods.mean_comparison import (
    Comparison,
    Mean,
    common_variance_difference,
    difference_of_means,
    nested_mean,
    ratio_of_means,
)
from campaign.methods.variance_ratios import ratio_of

IntArray = npt.NDArray[np.int64]

FEWEST_MODULES = 3
"""Modules a generation from which on a verdict is given."""

FEWEST_BATCHES = 3
"""Batches in each generation from which on batches are a level above modules."""

TOO_FEW_MODULES = "too few modules"
NOT_DECIDED = "not decided"
NOT_TESTED = "not tested"
POOLED = "its uncertainty is common to the generation"
SHARED_BY_READINGS = "readings of one sensor may share what is in it"
NOISE_DIFFERS = "noise or numbers of runs differ as much"
AT_COMMON_POSITIONS = "at common positions"
NO_COMMON_POSITION = "their sensors share no position"
EQUIVALENT = "equivalent"

SIGNIFICANT = 0.05

FEELABLE_NOISE = 0.02
"""Share of the square of a figure from which on a difference in noise is looked at."""

NOISE_EXPLAINS = 4.0
"""A difference of squares of up to so many times that of the noise may be noise: the largest of several noisy
values exceeds one of them by about a factor of two."""


@dataclass(frozen=True)
class Pair:
    """One figure of two generations, before the family is corrected.

    ``margin`` is NaN where none is stated; ``p`` and ``p_equivalence`` are NaN where there is no verdict.
    ``p_common_variance`` is of the test that takes both generations to spread alike. ``label`` says what
    restricts the comparison, empty if nothing does; ``untested`` says why there is no test, likewise.
    """

    figure: HeadlineFigure
    unit: str
    first: str
    second: str
    estimate_first: float
    estimate_second: float
    kind: Kind
    found: Comparison
    p_equivalence: float
    p_common_variance: float
    margin: float
    modules: tuple[int, int]
    sensors: tuple[int, int]
    label: str = ""
    untested: str = ""

    @property
    def has_modules(self) -> bool:
        """Whether there are modules enough to say more than the estimates."""
        return min(self.modules) >= FEWEST_MODULES

    @property
    def has_verdict(self) -> bool:
        """Whether more than the estimates may be said."""
        return self.has_modules and not self.untested


def compare_means(
    figure: HeadlineFigure, rows: pd.DataFrame, first: str, second: str, margin: tuple[float, str] | None
) -> Pair:
    """Compare the means of a figure of which every sensor has a value.

    Parameters
    ----------
    figure
        Which.
    rows
        Its values of both generations, in one unit (columns of ``VALUE_COLUMNS``).
    first, second
        The older and the newer generation.
    margin
        (value, unit) of equivalence; a unit of ``1`` makes the comparison a ratio.
    """
    rows, label = _at_common_positions(rows, first, second)
    sides = [rows[rows["generation"] == name] for name in (first, second)]
    several = all(_batches(side) >= FEWEST_BATCHES for side in sides)
    means = [_mean_of(side, several) for side in sides]
    kind: Kind = figure.kind if margin is None else "ratio" if margin[1] == "1" else "difference"
    joined = ratio_of_means if kind == "ratio" else difference_of_means
    untested = POOLED if figure.is_pooled else NOISE_DIFFERS if _noise_explains(sides) else ""
    enough = min(mean.groups for mean in means) >= FEWEST_MODULES and not untested
    found = joined(means[0], means[1])
    return Pair(
        figure=figure,
        unit=str(rows["unit"].iloc[0]),
        first=first,
        second=second,
        estimate_first=means[0].estimate,
        estimate_second=means[1].estimate,
        kind=kind,
        found=found if not untested else Comparison(found.estimate, *(math.nan,) * 4),
        p_equivalence=_equivalence(kind, means[0], means[1], margin) if enough else math.nan,
        p_common_variance=_with_common_variance(rows, second, several, label) if enough else math.nan,
        margin=math.nan if margin is None or untested else margin[0],
        modules=(means[0].groups, means[1].groups),
        sensors=(means[0].members, means[1].members),
        label=label,
        untested=untested,
    )


def _noise_explains(sides: Sequence[pd.DataFrame]) -> bool:
    """Whether noise differs so much between two generations that it may be all of the difference found.

    What grows with noise, or shrinks with few runs, differs between alike generations that were measured
    differently: more runs of the same modules would count as an improvement.
    """
    noise = [float((side["noise"].astype(float) ** 2).mean()) for side in sides]
    squares = [float((side["value"] ** 2).mean()) for side in sides]
    apart = abs(noise[1] - noise[0])
    if not apart > FEELABLE_NOISE * sum(squares) / 2:  # also where the noise is unknown
        return False
    return abs(squares[1] - squares[0]) < NOISE_EXPLAINS * apart


def _at_common_positions(rows: pd.DataFrame, first: str, second: str) -> tuple[pd.DataFrame, str]:
    """Leave the positions that both have; where they share none, all, and a label that says so."""
    own = {name: set(rows.loc[rows["generation"] == name, "position"]) for name in (first, second)}
    common = own[first] & own[second]
    if not common:
        return rows, NO_COMMON_POSITION
    if own[first] == own[second]:
        return rows, ""
    return rows[rows["position"].isin(common)], AT_COMMON_POSITIONS


def _batches(side: pd.DataFrame) -> int:
    """Number of batches, 0 where some module's is not recorded."""
    names = side["batch"].astype(str)
    return 0 if (names == "").any() else int(names.nunique())


def _codes(side: pd.DataFrame, several: bool) -> tuple[list[IntArray], IntArray]:
    columns = ["batch", "module"] if several else ["module"]
    levels = [np.asarray(pd.factorize(side[c], sort=True)[0], dtype=np.int64) for c in columns]
    return levels, np.asarray(pd.factorize(side["position"], sort=True)[0], dtype=np.int64)


def _mean_of(side: pd.DataFrame, several: bool) -> Mean:
    levels, places = _codes(side, several)
    return nested_mean(side["value"].to_numpy(float), levels, places)


def _with_common_variance(rows: pd.DataFrame, second: str, several: bool, label: str) -> float:
    """Return p of the test that takes both to spread alike; positions that they share are a factor."""
    rows = rows.assign(
        module=rows["generation"].astype(str) + "\n" + rows["module"].astype(str),
        batch=rows["generation"].astype(str) + "\n" + rows["batch"].astype(str),
    )
    levels, places = _codes(rows, several)
    side = np.asarray(rows["generation"] == second, dtype=np.int64)
    shared = None if label == NO_COMMON_POSITION else places
    return common_variance_difference(rows["value"].to_numpy(float), side, levels, shared).p


def _equivalence(kind: Kind, first: Mean, second: Mean, margin: tuple[float, str] | None) -> float:
    if margin is None:
        return math.nan
    tested = equivalence_of_ratio if kind == "ratio" else equivalence_of_difference
    return tested(first, second, margin[0])


def compare_spreads(
    figure: HeadlineFigure,
    spreads: tuple[Spread, Spread],
    unit: str,
    modules: tuple[int, int],
    margin: tuple[float, str] | None,
) -> Pair:
    """Compare the SDs of one component of two generations by their ratio.

    Without limits of both there is no interval, and no ratio where the first SD is estimated as zero.
    """
    first, second = (spread.variance for spread in spreads)
    share = margin[0] if margin is not None and margin[1] == "1" else math.nan
    found, label = Comparison(math.nan, math.nan, math.nan, math.nan, math.nan), ""
    if first.estimate > 0:
        ratio = ratio_of(second, first)
        estimate, low, high = (
            math.sqrt(v) if v >= 0 else math.nan for v in (ratio.estimate, ratio.low, ratio.high)
        )
        found = Comparison(estimate, low, high, math.nan, difference_of_spreads(first, second))
    else:
        label = "the first SD is not distinguishable from zero"
    # loops that differ from sensor to sensor are left in the residual, whose interval counts readings
    untested = SHARED_BY_READINGS if spreads[0].level == "residual" else ""
    if untested:
        found, share = Comparison(found.estimate, *(math.nan,) * 4), math.nan
    enough = min(modules) >= FEWEST_MODULES and math.isfinite(share) and first.estimate > 0
    names = {spread.called for spread in spreads}
    if len(names) > 1:
        label = f"{spreads[0].called} against {spreads[1].called}"
    return Pair(
        figure=figure,
        unit=unit,
        first=spreads[0].generation,
        second=spreads[1].generation,
        estimate_first=math.sqrt(first.estimate),
        estimate_second=math.sqrt(second.estimate),
        kind="ratio",
        found=found,
        p_equivalence=equivalence_of_spreads(first, second, share) if enough else math.nan,
        p_common_variance=math.nan,
        margin=share,
        modules=modules,
        sensors=(0, 0),
        label=label,
        untested=untested,
    )


def verdict_of(pair: Pair, p_adjusted: float, equivalence_adjusted: float) -> str:
    """Return what is shown of a pair: better, worse, larger, smaller, equivalent, or that nothing is.

    Both p values are corrected for the family. Where a difference is shown and shown to be within the margin
    too, both are said.
    """
    if not pair.has_modules:
        return TOO_FEW_MODULES
    if pair.untested:
        return NOT_TESTED
    word = _direction(pair) if p_adjusted < SIGNIFICANT else ""
    within = equivalence_adjusted < SIGNIFICANT
    if word and within:
        return f"{word}, within the margin"
    return word or (EQUIVALENT if within else NOT_DECIDED)


def _direction(pair: Pair) -> str:
    smaller = pair.estimate_second < pair.estimate_first
    if not pair.figure.smaller_is_better:
        return "smaller" if smaller else "larger"
    return "better" if smaller else "worse"


def margin_of(
    figure: HeadlineFigure, unit: str, margins: Mapping[str, tuple[float, str]]
) -> tuple[float, str] | None:
    """Return the margin that the description states for a figure, in a unit that fits; else ``None``."""
    stated = margins.get(figure.name)
    if stated is None or not stated[0] > 0:
        return None
    return stated if stated[1] in ("1", unit) else None
