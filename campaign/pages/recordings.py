"""Page 12, Recordings: what was read, what was set aside and why, what was noted. The counts add up."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.notices import WEIGHTS, Notice
from campaign.pages import slugs
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table

NOTICE_COLUMNS = ("code", "weight", "file", "line", "column", "what", "done", "remedy")
SHOWN_ROWS = 60


@dataclass(frozen=True)
class KindCount:
    """How many files of one kind there are, and how many of them are used and set aside."""

    kind: str
    files: int
    used: int
    set_aside: int


def recordings_page(results: CampaignResults) -> Page:
    """Return page 12; it is part of every site."""
    intake = results.intake
    return Page(
        slug="recordings",
        number=12,
        title="Recordings",
        template="recordings.html",
        context={
            "counts": intake.counts,
            "kinds": kind_counts(intake.recordings),
            "weights": weight_counts(results.notices),
            "other_campaigns": intake.other_campaigns,
        },
        tables=(
            set_aside_table(intake.recordings, results.notices),
            notice_groups_table(results.notices),
            recordings_table(intake.recordings),
            trials_table(intake.trials),
        ),
        description="What was read, what was set aside and why, what was noted; the counts add up.",
    )


def kind_counts(recordings: pd.DataFrame) -> tuple[KindCount, ...]:
    """Return the number of recordings by kind, sorted; files that are no recordings are left out."""
    own = recordings[recordings["fate"] != "not a recording"]
    made = []
    for kind, rows in own.groupby(own["kind"].astype(str), sort=True):
        fates = rows["fate"].value_counts()
        used, aside = int(fates.get("used", 0)), int(fates.get("set aside", 0))
        made.append(KindCount(str(kind) or "kind not known", len(rows), used, aside))
    return tuple(made)


def weight_counts(notices: Iterable[Notice]) -> dict[str, int]:
    """Return how many notices there are of each weight, heaviest first."""
    weights = [notice.weight for notice in notices]
    return {weight: weights.count(weight) for weight in WEIGHTS}


def notices_frame(notices: Iterable[Notice]) -> pd.DataFrame:
    """Return one row a notice with the columns of ``notices.csv`` and how many occurrences it stands for."""
    rows = [{**{key: getattr(n, key) for key in NOTICE_COLUMNS}, "count": n.count} for n in notices]
    frame = pd.DataFrame(rows, columns=[*NOTICE_COLUMNS, "count"])
    frame["file"] = frame["file"].fillna("").astype(str)
    for key in ("line", "column"):
        frame[key] = frame[key].astype("Int64")
    return frame


def notices_table(notices: Iterable[Notice]) -> Table:
    """Return the table of all notices, heaviest first; it is a file of the site."""
    return Table(
        name="notices", caption="Every notice about the input.", frame=notices_frame(notices), columns=()
    )


def notice_groups_table(notices: Iterable[Notice]) -> Table:
    """Return the notices as the page shows them: those that say the same of several files are one row."""
    groups: dict[tuple[str, ...], list[str]] = {}
    for notice in notices:
        said = (notice.weight, notice.what, notice.done, notice.remedy)
        groups.setdefault(said, []).append(notice.where)
    rows = [(*said, places[0], _others(places)) for said, places in groups.items()]
    frame = pd.DataFrame(rows, columns=["weight", "what", "done", "remedy", "first", "others"], dtype=object)
    return Table(
        name="notice_groups",
        caption="Everything that was noted about the input, heaviest first.",
        frame=frame,
        columns=(
            Column("weight", "Weight", kind="text"),
            Column("first", "Where", kind="code"),
            Column("others", "And", kind="text"),
            Column("what", "What was found", kind="text"),
            Column("done", "What was done", kind="text"),
            Column("remedy", "What would mend it", kind="text"),
        ),
        note="‘Stops’ ends a report, ‘set aside’ means not used, ‘noted’ means used, with something that a "
        "reader should know.",
        source="notices",
    )


def set_aside_table(recordings: pd.DataFrame, notices: Iterable[Notice]) -> Table:
    """Return the recordings that are not used, each with its reasons."""
    reasons: dict[str, list[str]] = {}
    for notice in notices:
        if notice.weight == "set aside" and notice.file:
            reasons.setdefault(notice.file, []).append(notice.what)
    rows = recordings[recordings["fate"] == "set aside"]
    return Table(
        name="set_aside",
        caption="Recordings that are not used, and why.",
        frame=rows.assign(_why=["; ".join(reasons.get(str(file), [])) for file in rows["file"]]),
        columns=(
            Column("file", "File", kind="code"),
            Column("kind", "Kind", kind="text"),
            Column("_why", "Why", kind="text"),
        ),
        source="recordings",
    )


def recordings_table(recordings: pd.DataFrame) -> Table:
    """Return one row a file of the campaign folder."""
    return Table(
        name="recordings",
        caption="Every file of the campaign folder.",
        frame=recordings,
        columns=(
            Column("file", "File", kind="code"),
            Column("kind", "Kind", kind="text"),
            Column("fate", "Fate", kind="text"),
            Column("rows", "Rows", kind="integer", missing=""),
            Column("bytes", "Size", "B", kind="integer", missing=""),
            Column("notices", "Notices", kind="integer", missing=""),
        ),
        shown_rows=SHOWN_ROWS,
    )


def trials_table(trials: pd.DataFrame) -> Table:
    """Return one row a trial, each a link to its section on its sensor's page."""
    names = zip(
        trials["module"].astype(str), trials["sensor"].astype(str), trials["file"].astype(str), strict=True
    )
    return Table(
        name="trials",
        caption="Every trial: a sensor’s share of a recording.",
        frame=trials.assign(_href=[slugs.trial_href(m, s, f) if m and s else "" for m, s, f in names]),
        columns=(
            Column("file", "File", kind="code", href="_href"),
            Column("kind", "Kind", kind="text"),
            Column("generation", "Generation", kind="text"),
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("repetition", "Repetition", kind="integer", missing=""),
            Column("session", "Session", kind="text"),
            Column("fate", "Fate", kind="text"),
        ),
        shown_rows=SHOWN_ROWS,
    )


def _others(places: Sequence[str]) -> str:
    """Return how many more places say the same, in words."""
    more = len(places) - 1
    return f"{more} more {'place' if more == 1 else 'places'}" if more else ""
