"""What ``campaign inspect`` says and writes: an intake as plain text, and as three tables."""

from __future__ import annotations

import os
import shutil
import tempfile
import textwrap
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path

import pandas as pd

from campaign.notices import CampaignStops, Notice, Weight
from campaign.recordings.intake import Intake
from campaign.recordings.intake_tables import notices_table, spelled_paths
from campaign.recordings.register import shown

TABLE_NAMES = ("recordings", "trials", "notices")
"""Tables that :func:`write_tables` writes, as NAME.csv."""

SHOWN_A_CODE: dict[Weight, int] = {"stops": 1000, "set aside": 20, "noted": 3}
"""Notices of one code that the text shows; the rest is counted, and stands in the tables."""

IN_TABLES = "in notices.csv (inspect with --tables DIR writes it)"
"""Where the notices stand that ``campaign inspect`` only counts."""

ON_SITE = "on the Recordings page"
"""Where they stand once a site is written."""

HEADINGS: dict[Weight, str] = {"stops": "STOPS", "set aside": "SET ASIDE", "noted": "NOTED"}


def inspection_lines(intake: Intake, width: int = 100, where: str = IN_TABLES) -> list[str]:
    """Return an intake as lines of text: counts that add up, then notices by weight.

    Parameters
    ----------
    intake
        From :func:`campaign.recordings.intake.run_intake`.
    width
        Characters a line.
    where
        Where the notices stand that are only counted, as the end of a sentence.
    """
    return [
        intake.description.title,
        "",
        *_count_lines(intake),
        *notice_lines(intake.notices, width, where),
    ]


def _count_lines(intake: Intake) -> Iterator[str]:
    counts = intake.counts
    yield f"  files       {counts.files:>6}"
    yield f"    used      {counts.used:>6}"
    yield f"    set aside {counts.set_aside:>6}"
    yield f"    no recordings {counts.not_recordings:>2}"
    yield f"  trials      {counts.trials:>6}"
    yield f"    used      {counts.trials_used:>6}"
    used = intake.trials[intake.trials["fate"] == "used"]
    for kind, count in used["kind"].value_counts(sort=False).sort_index().items():
        yield f"      {kind:<10}{count:>4}"
    for folder in intake.other_campaigns:
        yield f"  another campaign, not counted: {folder}"


def notice_lines(notices: Sequence[Notice], width: int = 100, where: str = IN_TABLES) -> list[str]:
    """Return notices as lines of text, by weight and code."""
    lines: list[str] = []
    for weight, heading in HEADINGS.items():
        of_weight = [notice for notice in notices if notice.weight == weight]
        if of_weight:
            lines += ["", f"{heading} ({len(of_weight)})"]
        for code in dict.fromkeys(notice.code for notice in of_weight):
            lines += _code_lines(code, [n for n in of_weight if n.code == code], width, where)
    return lines


def _code_lines(code: str, notices: Sequence[Notice], width: int, where: str) -> Iterator[str]:
    shown = SHOWN_A_CODE[notices[0].weight]
    yield ""
    yield f"  {code} ({len(notices)})"
    remedies = dict.fromkeys(notice.remedy for notice in notices[:shown])
    for notice in notices[:shown]:
        place = f"{notice.where}: " if notice.where else ""
        yield from _wrapped(f"{place}{notice.what}; {notice.done}.", "    ", width)
        if len(remedies) > 1 and notice.remedy:
            yield from _wrapped(f"to mend: {notice.remedy}", "      ", width)
    if len(notices) > shown:
        yield f"    and {len(notices) - shown} more {where}"
    if len(remedies) == 1 and notices[0].remedy:
        yield from _wrapped(f"to mend: {notices[0].remedy}", "      ", width)


def _wrapped(text: str, indent: str, width: int) -> list[str]:
    return textwrap.wrap(
        text,
        width,
        initial_indent=indent,
        subsequent_indent=indent + "  ",
        break_long_words=False,
        break_on_hyphens=False,
    )


def check_tables_folder(folder: Path) -> None:
    """Stop unless tables may be written to a folder: it is not there, or holds nothing but such tables.

    Raises
    ------
    CampaignStops
        Where the folder holds anything else: nothing of anybody's is overwritten.
    """
    names = {f"{name}.csv" for name in TABLE_NAMES}
    if folder.is_dir():
        others = sorted(path.name for path in folder.iterdir() if path.name not in names)
        problem = f"holds other things ({others[0]})" if others else ""
    else:
        problem = "is no folder" if folder.exists() or folder.is_symlink() else ""
    if problem:
        what = f"'{folder}' {problem}"
        remedy = "name a new folder for the tables"
        raise CampaignStops(
            [Notice("folder-taken", "stops", None, None, None, what, "nothing is written", remedy)]
        )


def write_tables(intake: Intake, folder: Path) -> None:
    """Write recordings.csv, trials.csv and notices.csv, all of them or none.

    Parameters
    ----------
    intake
        From :func:`campaign.recordings.intake.run_intake`.
    folder
        Where to; made where it is not there, its own former tables replaced.

    Raises
    ------
    CampaignStops
        Where the folder holds anything else.
    """
    check_tables_folder(folder)
    texts = {
        "recordings": _csv(intake.recordings),
        "trials": _csv(intake.trials),
        "notices": _csv(notices_table(intake.notices)),
    }
    target = folder.resolve()
    target.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(prefix=f".{target.name}.", dir=target.parent) as aside:
        fresh = Path(aside) / "new"
        fresh.mkdir()
        for name, text in texts.items():
            (fresh / f"{name}.csv").write_text(text, encoding="utf-8", newline="\n")
        _swap(fresh, target, Path(aside) / "old")


def _csv(table: pd.DataFrame) -> str:
    return spelled_paths(table).to_csv(index=False, lineterminator="\n")


def _swap(fresh: Path, target: Path, old: Path) -> None:
    if target.exists():
        os.rename(target, old)
    try:
        os.rename(fresh, target)
    except OSError:
        if old.exists():
            shutil.move(old, target)
        raise


def print_lines(lines: Iterable[str]) -> str:
    """Join lines into the text of a terminal, each ended by a line feed; the unseen is spelled out."""
    return "".join(f"{shown(line)}\n" for line in lines)
