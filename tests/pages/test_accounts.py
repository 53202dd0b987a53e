"""Recordings and Provenance: counts, reasons, hashes that the usual program checks, citations."""

from __future__ import annotations

import hashlib
import subprocess
from pathlib import Path

import pandas as pd
import pytest

from campaign.notices import Notice
from campaign.pages.citation import citation
from campaign.pages.provenance import CAMPAIGN_CHECKSUMS, SITE_CHECKSUMS
from campaign.pages.recordings import (
    kind_counts,
    notice_groups_table,
    notices_table,
    set_aside_table,
    weight_counts,
)
from campaign.pages.tables import csv_bytes, shown_cells
from campaign.provenance.manifest import checksum_list, with_manifests
from campaign.recordings.description import Author, Description

RECORDINGS = pd.DataFrame(
    {
        "file": ["a.csv", "b.csv", "c.csv", "notes/x.md"],
        "sha256": ["1", "2", "3", ""],
        "bytes": [10, 20, 30, 5],
        "kind": ["staircase", "staircase", "", ""],
        "fate": ["used", "set aside", "set aside", "not a recording"],
        "rows": [5, 6, 0, 0],
        "notices": [0, 2, 1, 0],
    }
)
NOTICES = (
    Notice("duplicate", "set aside", "b.csv", None, None, "the same bytes as a.csv", "not used", "remove it"),
    Notice("gap", "noted", "a.csv", 14, 3, "3 empty cells", "left out", count=3),
    Notice("empty", "set aside", "c.csv", None, None, "no row", "not used"),
)


def test_kinds_and_weights_are_counted() -> None:
    assert [(k.kind, k.files, k.used, k.set_aside) for k in kind_counts(RECORDINGS)] == [
        ("kind not known", 1, 0, 1),
        ("staircase", 2, 1, 1),
    ]
    assert weight_counts(NOTICES) == {"stops": 0, "set aside": 2, "noted": 1}


def test_every_recording_set_aside_has_its_reason() -> None:
    rows = shown_cells(set_aside_table(RECORDINGS, NOTICES))
    assert [(row[0].text, row[2].text) for row in rows] == [
        ("b.csv", "the same bytes as a.csv"),
        ("c.csv", "no row"),
    ]


def test_notices_say_where_and_are_a_file_with_the_promised_columns() -> None:
    table = notices_table(NOTICES)
    lines = csv_bytes(table.frame, "notices").decode("utf-8").splitlines()
    assert lines[0] == "code,weight,file,line,column,what,done,remedy,count"
    assert lines[2] == "gap,noted,a.csv,14,3,3 empty cells,left out,,3"


def test_notices_that_say_the_same_are_one_row_of_the_page() -> None:
    comma = [
        Notice("dialect", "noted", f"{name}.csv", 5, None, "a decimal comma", "read so") for name in "xyz"
    ]
    rows = shown_cells(notice_groups_table((*NOTICES, *comma)))
    assert [(row[1].text, row[2].text) for row in rows] == [
        ("b.csv", ""),
        ("a.csv, line 14, column 3", ""),
        ("c.csv", ""),
        ("x.csv, line 5", "2 more places"),
    ]
    assert notice_groups_table(()).frame.empty


def test_without_notices_the_file_has_its_header() -> None:
    assert csv_bytes(notices_table(()).frame, "notices").decode().startswith("code,weight,file,line,column")


def test_the_usual_program_checks_the_lists(tmp_path: Path) -> None:
    """GNU sha256sum reads both lists and names a file that changed."""
    site = {"index.html": b"<p>", "tables/a b.csv": b"1", "odd\\name": b"2"}
    files = with_manifests(site, {"trials/a.csv": hashlib.sha256(b"recording").hexdigest()})
    for address, content in files.items():
        (tmp_path / address).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / address).write_bytes(content)
    (tmp_path / "trials").mkdir()
    (tmp_path / "trials" / "a.csv").write_bytes(b"recording")
    check = ["sha256sum", "--check", "--strict"]
    for listed in (CAMPAIGN_CHECKSUMS, SITE_CHECKSUMS):
        subprocess.run([*check, listed], cwd=tmp_path, check=True, capture_output=True)
    assert set(files) == {*site, CAMPAIGN_CHECKSUMS, SITE_CHECKSUMS}
    (tmp_path / "index.html").write_bytes(b"<p>changed")
    failed = subprocess.run(
        [*check, SITE_CHECKSUMS], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    assert failed.returncode == 1
    assert "index.html: FAILED" in failed.stdout


def test_a_list_is_sorted_and_ends_each_line() -> None:
    assert checksum_list({"b": "2", "a": "1"}) == b"1  a\n2  b\n"


def test_a_citation_has_authors_year_title_and_licence() -> None:
    made = citation(
        Description(
            "Cuffs & {panels}", date="2025-03-10", licence="CC0-1.0", authors=(Author("Invented Author"),)
        )
    )
    assert made.sentence == (
        "Invented Author (2025). Cuffs & {panels} [recordings and report]. Licence: CC0-1.0."
    )
    assert r"title = {Cuffs \& \{panels\}}," in made.bibtex
    assert made.missing == ()


@pytest.mark.parametrize(
    ("description", "year"),
    [
        (Description("t"), "no date given"),
        (Description("t", last_day="2024-12-31"), "2024"),
        (Description("t", first_day="2023-01-01"), "2023"),
    ],
)
def test_a_year_comes_from_the_campaign_never_from_today(description: Description, year: str) -> None:
    made = citation(description)
    assert f"({year})" in made.sentence
    assert "authors" in made.missing


def test_invented_campaigns_are_cited_as_invented() -> None:
    made = citation(Description("t", simulated=True))
    assert "Invented data" in made.sentence
    assert "invented data" in made.bibtex
