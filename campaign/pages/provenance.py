"""Page 14, Provenance: files and hashes, downloads, how to cite, how to verify."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.pages import slugs
from campaign.pages.calculator import record_href
from campaign.pages.citation import citation
from campaign.pages.generations import earlier_files_table
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table, exported_columns

CAMPAIGN_CHECKSUMS = "provenance/campaign_files.sha256"
SITE_CHECKSUMS = "provenance/site_files.sha256"
SHOWN_FILES = 60


@dataclass(frozen=True)
class Download:
    """One file to take away: its address, what it holds, its rows and columns."""

    address: str
    words: str
    rows: int
    columns: int


def provenance_page(results: CampaignResults, tables: Sequence[Table]) -> Page:
    """Return page 14; *tables* are all that the site writes as files."""
    records = records_table(results)
    written = {t.name: t for t in (*tables, *((records,) if records else ())) if t.source is None}
    files = files_table(results.intake.recordings)
    earlier = earlier_files_table(results.earlier)
    return Page(
        slug="provenance",
        number=14,
        title="Provenance",
        template="provenance.html",
        context={
            "description": results.description,
            "earlier": results.earlier,
            "citation": citation(results.description, results.findings.scope.last_day),
            "downloads": [_download(written[name]) for name in sorted(written)],
            "hashed_files": int((results.intake.recordings["sha256"].astype(str) != "").sum()),
            "campaign_checksums": CAMPAIGN_CHECKSUMS,
            "site_checksums": SITE_CHECKSUMS,
        },
        tables=(*((records,) if records else ()), files, *((earlier,) if earlier else ())),
        description="Files and their hashes, downloads, how to cite and how to verify.",
    )


def files_table(recordings: pd.DataFrame) -> Table:
    """Return the files with their hashes."""
    return Table(
        name="files",
        caption="Files of the campaign that were opened, with the SHA-256 of their bytes.",
        frame=recordings[recordings["sha256"].astype(str) != ""],
        columns=(
            Column("file", "File", kind="code"),
            Column("bytes", "Size", "B", kind="integer", missing=""),
            Column("fate", "Fate", kind="text"),
            Column("sha256", "SHA-256", kind="code"),
        ),
        shown_rows=SHOWN_FILES,
        source="recordings",
    )


def records_table(results: CampaignResults) -> Table | None:
    """Return the calibration records as a table, ``None`` where there are none."""
    if results.calibration is None or not results.calibration.records:
        return None
    records = results.calibration.records
    rows = [
        {field.name: _flat(getattr(record, field.name)) for field in fields(record)} for record in records
    ]
    frame = pd.DataFrame(rows)
    frame["_record"] = [record_href(record) for record in records]
    frame["_words"] = "JSON"
    frame["_href"] = [slugs.sensor_href(record.module, record.sensor) for record in records]
    return Table(
        name="calibration_records",
        caption="Calibration records: a line, its covariance and its conditions, one a sensor and branch.",
        frame=frame,
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text", href="_href"),
            Column("branch", "Branch", kind="text"),
            Column("runs", "Runs", kind="integer"),
            Column("variance_source", "Variance of a run from", kind="text"),
            Column("_words", "Record", kind="text", href="_record"),
        ),
        shown_rows=SHOWN_FILES,
    )


def _download(table: Table) -> Download:
    columns = exported_columns(table.frame, table.name)
    return Download(table.file, table.caption, len(table.frame), len(columns))


def _flat(value: object) -> object:
    """Return a record's field as one cell: several texts are joined by ``; ``."""
    if isinstance(value, dict):
        return "; ".join(f"{key}: {value[key]}" for key in sorted(value))
    return "; ".join(str(v) for v in value) if isinstance(value, (tuple, list)) else value
