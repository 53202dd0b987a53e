"""Notices: what the program says about the input, counted and never silent.

A *finding* is a sentence of the Findings page; a *notice* is about the input. Every notice says where
(file, line, column), what was found, what was done about it, and what would mend it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

Weight = Literal["stops", "set aside", "noted"]
"""How heavy: the campaign cannot be read; this file, column or sensor is not used; a reader should know."""

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


NOTICE_CODES: dict[str, str] = {
    # Description and registers
    "no-description": "the folder has no campaign.toml, or it cannot be opened",
    "toml-encoding": "campaign.toml is not UTF-8",
    "toml-syntax": "campaign.toml is no TOML",
    "format-unstated": "campaign.toml does not state its format; 1 is taken",
    "unknown-format": "campaign.toml states a format that is not known",
    "no-title": "the campaign has no title; the folder's name stands for it",
    "unknown-key": "campaign.toml has a key that is not known; the nearest known one is named",
    "unknown-kind": "campaign.toml names a kind of trial that is not ours",
    "unknown-quantity": "campaign.toml names a quantity that is not known",
    "unknown-model": "the readout's model is neither parallel nor series",
    "unknown-direction": "the direction of use is neither unknown, rising nor falling",
    "value-missing": "campaign.toml lacks a value that is needed",
    "wrong-type": "a value of campaign.toml is not of the kind that its key takes",
    "wrong-value": "a value of campaign.toml cannot be used",
    "wrong-unit": "a quantity of campaign.toml has no unit, or one of the wrong family",
    "wrong-pattern": "a pattern of names or headers cannot be used",
    "reference-one-value": "[reference] gives one value alone; it is taken as the random part",
    "files-match-nothing": "a pattern of [recordings] files matches no file",
    "name-matches-nothing": "a pattern of [recordings] name matches no recording",
    "left-alone": "columns that the description says to leave alone; nobody reads them",
    "columns-match-nothing": "a [[columns]] table matches no column of any recording",
    "unreadable-register": "a register cannot be opened",
    "register-not-text": "a register holds NUL characters",
    "register-empty": "a register has not even a header",
    "register-encoding": "a register is not UTF-8; it is read as CP1252",
    "register-quotes": "the quotation marks of a register do not pair up",
    "register-column-missing": "a register lacks a column that it needs",
    "register-column-twice": "a register has two columns of one name",
    "register-column-unknown": "a column of a register looks like a slip of a known one; it is kept as it is",
    "register-row-ragged": "a row of a register has too many or too few fields; it is not used",
    "register-row-nameless": "a row of a register does not name its thing; it is not used",
    "register-row-repeated": "two rows of a register say the same of one thing; read once",
    "register-row-conflict": "two rows of a register say different things of one thing; neither is believed",
    "register-row-refused": "what a register says of a trial's file, module or sensor cannot be believed",
    "register-file-missing": "trials.csv names a file that is not in the folder",
    "register-file-unnamed": "trials.csv names a file that is no recording by [recordings] files",
    "rest-length-unreadable": "a rest length is no positive length; it is taken as unknown",
    "description-there": "campaign begin finds a campaign.toml already; it never overwrites one",
    "folder-taken": "a folder for tables holds other things; nothing is overwritten",
    "brief-file": "a file stands where the brief should be, and is no brief; nothing is overwritten",
    "page-not-there": "campaign figures is asked for a page that the report does not have",
    # Folder
    "no-recordings": "no file of the folder is named as a recording",
    "no-usable-trial": "every recording is set aside",
    "another-campaign": "a folder inside has a description of its own; none of its files are this campaign's",
    "own-output": "a folder inside is a site written by this program; it is not counted",
    "unreadable-folder": "a folder cannot be opened; nothing in it is read",
    "unreadable-file": "a recording cannot be opened",
    "vanished": "a file was gone before it could be read",
    "changed-while-read": "a recording changed after the folder was surveyed; it is not read",
    "reading-failed": "the program failed on a recording; it is set aside, the others are read",
    "reader-died": "the process that read a recording died of it, twice; the others are read",
    "link": "a link; links are not followed",
    "no-ordinary-file": "a pipe, socket or device under a recording's name; it is never opened",
    "too-large": "a recording is larger than can be read at once",
    "name-spelled-out": "a file's name holds characters that cannot be seen; they are spelled out",
    "case-of-name": "a file would be a recording but for upper and lower case",
    "twin-names": "two files have names that many systems cannot tell apart",
    "copy": "a recording has the same bytes as another: they are one recording",
    # Archives
    "archive-unreadable": "a file is no zip file, is cut short, or cannot be unpacked where it should be",
    "archive-member": "an archive holds a link, a name that leads outside, or what is no plain file",
    "archive-too-large": "an archive would unpack to more than is reasonable",
    "archive-damaged": "the bytes of a member of an archive are damaged",
    "name-not-portable": "a file's name cannot be unpacked everywhere; the campaign is not sealed",
    "name-not-for-windows": "a file's name cannot be unpacked on Windows; it is sealed as it is",
    "archive-place": "no archive is written into its own campaign, nor over a file that is none",
    "archive-unknown": "what is to be verified is neither a sealed archive nor a site",
    "changed-while-sealed": "a file changed between its reading and its sealing; nothing is sealed",
    "earlier-not-sealed": "an earlier campaign is not there, or its path means nothing elsewhere",
    "no-date": "neither the description nor any recording gives a date for the archive's metadata",
    "no-licence": "the description states no licence, so nobody may reuse what the archive holds",
    "licence-not-known": "the licence is no SPDX identifier that is known here; it is kept as text",
    "no-authors": "the description names no author",
    "orcid-refused": "an author's ORCID is not one: its form or its check digit is wrong; it is left out",
    "nothing-to-recompute": "what is verified holds no recordings, so nothing can be computed again",
    # Workers
    "cluster-not-installed": "a Dask cluster is asked for and Dask is not installed",
    "cluster-silent": "nobody answers at the address of a Dask cluster, or it has no workers",
    "cluster-differs": "workers of a Dask cluster have another version of this program, or see other files",
    # Who says which trial it is
    "identity-conflict": "two sources say different things of one trial; nothing is guessed",
    "identity-missing": "nobody says module, kind or sensor of a trial",
    "name-ambiguous": "a pattern can read a name in two ways",
    "kind-unknown": "a recording's kind is neither one of ours nor one of the lab's own words",
    "repetition-unreadable": "a repetition is no whole number",
    "repetition-assumed": "recordings number no repetition; 1 is taken",
    "generation-assumed": "no generation is named anywhere; all modules are 'generation 1'",
    "generation-missing": "a trial has no generation though others have one",
    "text-refused": "a text that tables show beside ids begins like a formula or holds unseen characters",
    "id-refused": "an id begins with a sign that spreadsheets take for a formula, or holds unseen characters",
    "id-unusual": "an id is very long or looks like a path; it is kept as text",
    "id-twins": "two ids look alike (upper and lower case, composed letters); they are kept apart",
    "module-not-listed": "modules.csv does not list a module; it is used as named",
    "sensor-not-listed": "sensors.csv does not list a sensor; it is used, its rest length unknown",
    "module-set-aside": "modules.csv sets a module aside",
    "sensor-set-aside": "sensors.csv sets a sensor aside",
    "left-out-by-request": "trials.csv says use = no, with a reason; it never changes the exit status",
    "reason-missing": "trials.csv says use = no without a reason; the recording is left out all the same",
    "use-unclear": "trials.csv says neither yes nor no under use",
    "rival-claim": "two recordings with different bytes claim to be the same trial; neither is used",
    "signals-alike": "two signal columns of a file claim to be the same sensor and repetition",
    "no-signal": "a recording has no signal column",
    "strain-not-known": "no length belongs to a sensor in this trial; it is not calibrated by it",
    "two-references": "two columns could be the reference; length is preferred, then elongation, then strain",
    "rest-length-unknown": "rest lengths are not known; none is invented and no strain is derived",
    "set-point-contradicted": "the data lie elsewhere than the set-point that the file's name states",
    "set-point-unreadable": "a set-point in a file's name has no known unit; it is not compared",
    "split-at-restarts": "a recording is split where its time restarts, as the description says",
    # Trials and readings
    "reference-not-known": "no length, elongation or strain is known in a staircase: no readings",
    "no-node-positions": "a layout trial records no node's position: no shape is rebuilt from it",
    "no-placements": "no placement of a layout trial has a signal",
    "no-geometry": "a module has layout trials but no network of nodes and sensors: no shape is rebuilt",
    "no-edge": "a sensor of a layout trial joins no two nodes of its module's geometry",
    "layout-without-line": "no line is there that the lengths of layout trials could be read by",
    "placement-in-part": "a placement is rebuilt without some of its edges, in part, or not at all",
    "placement-without-signal": "a placement holds no signal of a sensor at all",
    "no-plateaus": "no stretches of constant reference in a log: it gives no readings",
    "too-few-readings": "fewer than two usable plateaus or rows: no readings are taken",
    "missing-values": "rows without a reference or a signal are left out, counted",
    "plateau-without-signal": "a plateau holds no signal at all and gives no reading",
    "not-settled": "the signal still moves over the averaged part of a plateau; the reading is kept, marked",
    "no-line": "a sensor has readings at too few levels in every run: no line is fitted",
    "outlying-reading": "a reading lies further from its sensor's line than chance allows; it is kept",
    "reference-not-common": "a trial does not have the reference quantity that the campaign is analysed in",
    # Loops and endurance
    "no-cycles": "a cyclic trial goes up and comes back nowhere: it gives no loops",
    "too-few-cycles": "a cyclic trial has fewer than three whole cycles: nothing is said about settling",
    "loops-not-settled": "the loops of a trial still change at its end; its last cycles stand in",
    "cycles-unequal": "cycles that are smaller than the others of their trial, or lack samples",
    "gap-in-cycles": "a branch of a cycle has no samples over part of its length",
    "rate-unknown": "a cyclic trial has no usable time",
    "rate-not-constant": "the cycles of a trial ran at different rates; each keeps its own",
    "time-gaps": "the log pauses during the cycles",
    "clipped": "the signal rests at the end of its range while the length moves",
    "no-return-to-zero": "cycles turn away from the unstretched length",
    "temperature-not-recorded": "no temperature was recorded in trials whose results depend on it",
    "no-hold": "no length is kept for long in a trial that should hold one: it gives no hold",
    "hold-without-time": "a hold has no time, or one that runs backwards: it is not analysed",
    "hold-too-short": "a hold has too few samples or ramp times for the forms and slopes asked of it",
    "hold-without-line": "no staircase line gives a hold's full-scale output: it is shown in per cent",
    "temperature-not-steady": "temperature moved during a hold: its change is not called drift",
    "not-evenly-sampled": "a hold at rest is not evenly sampled: no Allan deviation is given",
    "no-endurance": "an endurance trial has no cycle numbers or no signal",
    # Pressure and other influences
    "influence-not-recorded": "a trial of an influence does not record it; no coefficient is taken from it",
    "influence-constant": "the influence of a trial does not vary beyond its noise",
    "length-not-kept": "a sweep of an influence nowhere keeps its length",
    "sweep-too-small": "at a kept length the influence covers a small part of the trial's range only",
    "no-return": "an influence is swept one way only: no loop width, and drift is part of the slope",
    "sweep-gap": "a sweep pauses for far longer than its samples lie apart",
    "sweep-clipped": "the signal stays at its extreme while an influence goes on; the readout may be full",
    "one-length": "an influence was swept at one known length: its change with strain is not identifiable",
    "spread-not-fitted": "the spread of an influence over modules and sensors cannot be fitted",
    # Earlier campaigns and comparison
    "earlier-not-joined": "an earlier campaign cannot be read, or is this one: the comparison leaves it out",
    "earlier-not-followed": "an earlier campaign names earlier ones of its own; they are not followed",
    "earlier-renamed": "two campaigns have a generation of one name; the earlier one carries its title",
    "earlier-rescaled": "figures of an earlier campaign in %FSO refer to this campaign's full scale",
    "earlier-differs": "figures of two generations rest on other units, ranges or kinds: not compared",
    "margin-not-used": "a margin of [limits.margins] fits no figure that was compared",
    # Bytes, encodings and line ends of one file
    "bom": "the file starts with a byte order mark; the mark is taken off, the first name is kept whole",
    "utf-16": "the file is UTF-16; it is decoded",
    "encoding": "the file is not UTF-8; it is decoded by the named encoding; the first such character shown",
    "crlf": "lines end in carriage return and line feed throughout",
    "cr": "lines end in carriage returns alone throughout",
    "mixed-eol": "the line end changes within the file",
    "no-final-newline": "the last line has no line end but is complete: it is kept",
    "empty": "the file has no bytes",
    "binary": "the file is not text: an archive, an image, or other binary content",
    "nul": "a line holds NUL bytes (overwritten or never written): the line is dropped",
    # Layout of one file
    "dialect": "separator or decimal sign other than comma and point were found out from the first lines",
    "preamble": "lines before the header that carry no comment sign; they are kept as preamble",
    "preamble-conflict": "the preamble gives one key twice with different values",
    "header-in-comment": "the header stands in the last comment line",
    "units-row": "a row below the header gives the units",
    "no-header": "no line names the columns and the description does not give them by position",
    "no-rows": "the file holds no row that can be read",
    "trailing-delimiter": "rows end in a separator; the empty last field is taken off, nothing shifts",
    "spacer-column": "a column with neither name nor values",
    "blank-line": "a line without any value is passed over",
    "comment-line": "a comment stands between the rows; it is passed over and shown",
    "repeated-header": "the header occurs again between the rows (a restarted logger); it is passed over",
    "footer": "lines of text after the last row; they are passed over and shown",
    "ragged": "a row with too many or too few fields is dropped: nothing says which field is whose",
    "truncated": "the last line is cut short and is dropped",
    "quote": "a quotation mark is never closed, or text follows a closed one",
    "field-length": "a field is far too long to be a number",
    # Columns
    "missing-column": "neither a time nor a reference, or no signal, can be found among the columns",
    "duplicate-column": "two columns claim to be the same quantity of the same sensor",
    "extra-column": "a column that neither the description nor the usual headers account for; it is not read",
    "column-not-found": "the description names a position that the file does not have",
    "several-clocks": "more than one time column; the first is used",
    "clock-unit": "times under a header in milliseconds look like seconds since 1970",
    "unit": "a unit is missing, not an accepted symbol, or of the wrong kind for the quantity",
    "unit-overruled": "the description states another unit than the header or units row, and holds",
    "converted": "columns are converted to canonical units",
    "mixed-identity": "a column that names module, sensor or run does not hold one value throughout",
    # Values
    "number": "a field is not a plain decimal number in the file's own dialect; it is never guessed",
    "missing-token": "empty fields or words for 'no value': missing, counted",
    "overrange": "the instrument's word for a value beyond its range: missing, counted apart (not at random)",
    "non-finite": "infinity is not a measurement: missing, counted",
    "sentinel": "a value beyond anything physical stands for 'no value': missing, counted",
    "suspect-sentinel": "a value far from all others that instruments use for 'no value': kept as read",
    "time-order": "time runs backwards; the order of the file is kept",
    "time-resolution": "a time repeats with other values: the clock is coarser than the sampling",
    "duplicate-row": "a row repeats the one before in every value; it is kept",
    "stuck": "the signal repeats to the last digit while the reference moves",
}
"""Meaning of every notice code, one plain line each; manual and Recordings page are written from it."""
