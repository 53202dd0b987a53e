"""What page 0 says of generations, as facts: what was shown of the newest modules against the others."""

from __future__ import annotations

from collections.abc import Hashable
from dataclasses import dataclass
from typing import Any

import pandas as pd

from campaign.analyses.findings import Finding
from campaign.analyses.generation_pairs import NOT_DECIDED, NOT_TESTED, TOO_FEW_MODULES
from campaign.analyses.generations import Confounded, Generations

MOST_NAMED = 4
"""Figures of one verdict that page 0 names with their numbers."""

Compared = dict[Hashable, Any]
"""One row of the table of generations."""


@dataclass(frozen=True)
class GenerationFinding:
    """The newest generation against one other.

    ``better``, ``worse``, ``changed`` (larger or smaller, with no better or worse) and ``equivalent`` hold
    rows of the table, in its order; ``undecided`` names the figures of which nothing is shown, ``untested``
    holds those compared without a test. ``few`` is whether there are too few modules for any verdict.
    ``modules`` are the numbers behind most of the figures. ``confounded`` differs together with the two.
    """

    first: str
    second: str
    compared: int
    better: tuple[Compared, ...]
    worse: tuple[Compared, ...]
    changed: tuple[Compared, ...]
    equivalent: tuple[Compared, ...]
    undecided: tuple[str, ...]
    untested: tuple[Compared, ...]
    few: bool
    modules: tuple[int, int]
    confounded: tuple[Confounded, ...]


def generation_findings(generations: Generations | None) -> tuple[Finding, ...]:
    """Return the finding on the newest generation, the nearest older one first; nothing without two."""
    if generations is None or generations.table.empty:
        return ()
    newest = generations.names[-1]
    others = list(reversed(generations.names[:-1]))
    facts = [_of_pair(generations, name, newest) for name in others]
    return (Finding("generations", tuple(fact for fact in facts if fact.compared)),) if facts else ()


def _of_pair(generations: Generations, first: str, second: str) -> GenerationFinding:
    table = generations.table
    rows = table[(table["first"] == first) & (table["second"] == second)]
    verdicts = rows["verdict"].astype(str)
    return GenerationFinding(
        first=first,
        second=second,
        compared=len(rows),
        better=_rows(rows[verdicts.str.startswith("better")]),
        worse=_rows(rows[verdicts.str.startswith("worse")]),
        changed=_rows(rows[verdicts.str.startswith(("larger", "smaller"))]),
        equivalent=_rows(rows[verdicts.eq("equivalent") | verdicts.str.endswith("within the margin")]),
        undecided=tuple(rows.loc[verdicts == NOT_DECIDED, "figure"].astype(str)),
        untested=_rows(rows[verdicts == NOT_TESTED]),
        few=len(rows) > 0 and bool((verdicts == TOO_FEW_MODULES).all()),
        modules=(_usual(rows["modules_first"]), _usual(rows["modules_second"])),
        confounded=tuple(c for c in generations.confounded if (c.first, c.second) == (first, second)),
    )


def _usual(modules: pd.Series) -> int:
    """The number of modules behind most figures, the larger of two that are as frequent."""
    return int(modules.mode().max()) if len(modules) else 0


def _rows(rows: pd.DataFrame) -> tuple[Compared, ...]:
    return tuple(rows.to_dict("records"))
