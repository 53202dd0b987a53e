"""In which order generations stand, and what differs together with them, read from registers and trials."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from typing import TYPE_CHECKING

import pandas as pd

from campaign.analyses.generation_pairs import FEWEST_BATCHES
from campaign.analyses.generations import Confounded, pairs_of

if TYPE_CHECKING:
    from campaign.recordings.intake import Intake


def order_of_generations(intake: Intake) -> tuple[str, ...]:
    """Return the generations of the trials used, oldest first.

    By the earliest day a module was built (``built`` in modules.csv) where all have one, else by the first
    start of a trial where all are recorded, else by name.
    """
    used = intake.trials[intake.trials["fate"] == "used"]
    names = sorted(set(used["generation"].astype(str)))
    for register, column in ((intake.modules, "built"), (used, "started")):
        first = _first_days(register, column)
        if all(first.get(name) for name in names):
            return tuple(sorted(names, key=lambda name: (first[name], name)))
    return tuple(names)


def _first_days(register: pd.DataFrame, column: str) -> dict[str, str]:
    """Generation → its earliest ISO text in *column*, where every row of it that is used has one."""
    if column not in register:
        return {}
    texts = register[column].fillna("").astype(str)
    dated = register[texts.str[:4].str.isdigit()]
    return {str(name): min(rows[column].astype(str)) for name, rows in dated.groupby("generation", sort=True)}


def confounded_within(intake: Intake, order: Sequence[str]) -> tuple[Confounded, ...]:
    """Return what differs together with the generations of one campaign.

    Batches (one, or too few to be a level of their own), dates, stands, operators and readout channels.
    """
    used = intake.trials[intake.trials["fate"] == "used"]
    found: list[Confounded] = []
    names = [name for name in order if name in set(used["generation"].astype(str))]
    for first, second in pairs_of(names):
        sides = [used[used["generation"] == name] for name in (first, second)]
        found += _batches(sides, first, second)
        found += _dates(sides, first, second)
        for column in ("stand", "operator"):
            sets = [_of_sessions(intake, side, column) for side in sides]
            found += _apart(column, sets, first, second)
        channels = [_channels(intake, name) for name in (first, second)]
        found += _apart("channel", channels, first, second)
    return tuple(found)


def confounded_between(titles: dict[str, str], order: Sequence[str]) -> tuple[Confounded, ...]:
    """Return the pairs whose generations were measured in different campaigns (generation → title)."""
    return tuple(
        Confounded("campaign", first, second, titles[first], titles[second])
        for first, second in pairs_of([name for name in order if name in titles])
        if titles[first] != titles[second]
    )


def _batches(sides: Sequence[pd.DataFrame], first: str, second: str) -> Iterator[Confounded]:
    batches = [sorted(set(side["batch"].fillna("").astype(str)) - {""}) for side in sides]
    if all(len(own) >= FEWEST_BATCHES for own in batches):
        return
    words = [", ".join(own) if own else "not recorded" for own in batches]
    yield Confounded("batch", first, second, words[0], words[1])


def _dates(sides: Sequence[pd.DataFrame], first: str, second: str) -> Iterator[Confounded]:
    days = [sorted(d for d in side["started"].astype(str).str[:10] if d[:4].isdigit()) for side in sides]
    if not all(days) or (days[0][0] <= days[1][-1] and days[1][0] <= days[0][-1]):
        return
    words = [own[0] if own[0] == own[-1] else f"{own[0]} to {own[-1]}" for own in days]
    yield Confounded("date", first, second, words[0], words[1])


def _of_sessions(intake: Intake, side: pd.DataFrame, column: str) -> set[str]:
    sessions = intake.sessions
    if sessions is None or column not in sessions or "module" not in sessions:
        return set()
    own = sessions["module"].astype(str).isin(set(side["module"].astype(str)))
    return set(sessions.loc[own, column].fillna("").astype(str)) - {""}


def _channels(intake: Intake, generation: str) -> set[str]:
    return {i.channel for i in intake.used_identities if i.generation == generation} - {""}


def _apart(what: str, sets: Sequence[Iterable[str]], first: str, second: str) -> Iterator[Confounded]:
    """Both recorded, and nothing in common."""
    one, other = (sorted(s) for s in sets)
    if one and other and not set(one) & set(other):
        yield Confounded(what, first, second, ", ".join(one), ", ".join(other))
