"""Notices: what the program says about the input, counted and never silent.

A *finding* is a sentence of the Findings page; a *notice* is about the input. Every notice says where
(file, line, column), what was found, what was done about it, and what would mend it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

Weight = Literal["stops", "set aside", "noted"]
"""How heavy a notice is: the campaign cannot be read; this file, column or sensor is not used; a reader should know."""

WEIGHTS: tuple[Weight, ...] = ("stops", "set aside", "noted")


@dataclass(frozen=True)
class Notice:
    """One remark about the input.

    Attributes
    ----------
    code
        Short stable name of the kind of remark, such as ``"decreasing-time"``.
    weight
        ``"stops"``, ``"set aside"`` or ``"noted"``.
    file
        Path from the campaign folder with forward slashes, or ``None`` where no file is meant.
    line
        Line of the file, counted from 1, or ``None``.
    column
        Field of the line, counted from 1 (in ``campaign.toml`` and encodings: character), or ``None``.
    what
        What was found, in a plain sentence without a final stop.
    done
        What the program did about it.
    remedy
        What would mend it; empty where nothing needs mending.
    count
        How many occurrences this notice stands for (rows, values), at least 1.
    """

    code: str
    weight: Weight
    file: str | None
    line: int | None
    column: int | None
    what: str
    done: str
    remedy: str = ""
    count: int = 1

    def at(self, file: str) -> Notice:
        """Return the same notice placed in *file* (a path from the campaign folder)."""
        return replace(self, file=file)

    @property
    def where(self) -> str:
        """The place in words, such as ``trials/a.csv, line 12, column 3``; empty where there is none."""
        parts = [self.file] if self.file is not None else []
        if self.line is not None:
            parts.append(f"line {self.line}")
        if self.column is not None:
            parts.append(f"column {self.column}")
        return ", ".join(parts)


class CampaignStops(Exception):  # noqa: N818 - it is the report that stops, not an error of the program
    """The campaign cannot be read; carries every fault found, not only the first.

    Attributes
    ----------
    notices
        All notices of weight ``"stops"``, in the order in which they were found.
    """

    def __init__(self, notices: Iterable[Notice]) -> None:
        self.notices: tuple[Notice, ...] = tuple(notices)
        super().__init__("; ".join(f"{n.where}: {n.what}" if n.where else n.what for n in self.notices))


def sort_notices(notices: Iterable[Notice]) -> tuple[Notice, ...]:
    """Return notices in reading order: heaviest first, then by file, line, column and code."""
    return tuple(
        sorted(
            notices,
            key=lambda n: (WEIGHTS.index(n.weight), n.file or "", n.line or 0, n.column or 0, n.code, n.what),
        )
    )
