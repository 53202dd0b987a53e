"""Metadata: valid whatever is missing, nothing made up, every gap said."""

from __future__ import annotations

import json
import re
from pathlib import Path

import jsonschema
import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st
from rocrate.rocrate import ROCrate

from campaign.notices import NOTICE_CODES
from campaign.pages.citation import citation, citation_day
from campaign.pages.references import REFERENCES, bibliography, cited_in
from campaign.provenance.citation import citation_file, plain_text
from campaign.provenance.licences import KNOWN, find_licence
from campaign.provenance.metadata import STAND_IN_DAY, gather_metadata, orcid_address
from campaign.provenance.ro_crate import Part, crate_metadata, media_type, preview_page, reference
from campaign.recordings.description import Author, Description

ROOT = Path(__file__).parents[2]
SCHEMA = json.loads((ROOT / "tests" / "reference" / "citation_file_format" / "schema.json").read_bytes())

DESCRIPTIONS = {
    "nothing known": Description("t"),
    "licence in words": Description("t", licence="ask us first", date="2025-03-10"),
    "wrong orcid": Description("t", authors=(Author("A", "L", "0000-0002-1825-0098"),)),
    "all": Description(
        "Panels & <cuffs>",
        description='Say "so"',
        licence="CC0-1.0",
        date="2024-02-29",
        authors=(Author("Family, Given", "Lab", "https://orcid.org/0000-0002-1825-0097"),),
    ),
}
GAPS = {
    "nothing known": ["no-date", "no-licence", "no-authors"],
    "licence in words": ["licence-not-known", "no-authors"],
    "wrong orcid": ["no-date", "no-licence", "orcid-refused"],
    "all": [],
}


@pytest.mark.parametrize("which", DESCRIPTIONS)
def test_what_is_missing_is_said_and_metadata_are_valid_all_the_same(which: str, tmp_path: Path) -> None:
    description = DESCRIPTIONS[which]
    metadata = gather_metadata(description, "Recordings of sensors.")
    assert [notice.code for notice in metadata.notices] == GAPS[which]
    assert all(n.code in NOTICE_CODES and n.remedy and n.weight == "noted" for n in metadata.notices)
    cited = yaml.safe_load(citation_file(metadata).decode())
    jsonschema.validate(cited, SCHEMA, jsonschema.Draft7Validator)
    assert cited["title"] == description.title
    assert ("date-released" in cited) == bool(description.date)
    part = Part("campaigns/this/", "The campaign", "All of it.")
    payload = {"campaigns/this/a b.csv": b"1", "campaigns/this/ü:1.csv": b"2"}
    made = crate_metadata(metadata, citation(description), [part], {}, payload, "1.0")
    (tmp_path / "campaigns" / "this").mkdir(parents=True)
    for name, content in payload.items():
        (tmp_path / name).write_bytes(content)
    (tmp_path / "ro-crate-metadata.json").write_bytes(made)
    crate = ROCrate(str(tmp_path))
    assert crate.name == description.title
    assert crate.license.id
    assert crate.license["description"]
    files = [entity for entity in crate.data_entities if entity.type == "File"]
    assert {Path(entity.source).name for entity in files} == {"a b.csv", "ü:1.csv"}
    if not description.date:
        assert str(crate.datePublished).startswith(STAND_IN_DAY)
        assert f"{STAND_IN_DAY} stands in" in crate.description
    preview = preview_page(metadata, citation(description), [part]).decode()
    assert ("<cuffs>" in preview, "not known" in preview) == (False, not description.date)


@settings(max_examples=60, deadline=None)
@given(st.text(max_size=40), st.text(max_size=40), st.text(max_size=20))
def test_any_text_keeps_the_citation_file_whole(title: str, name: str, affiliation: str) -> None:
    """Quotes, colons, line breaks, other scripts: whatever stands in campaign.toml is a value, not YAML."""
    printable = "".join(c for c in title if c.isprintable())
    description = Description(
        printable or "t", authors=(Author("".join(c for c in name if c.isprintable())),)
    )
    metadata = gather_metadata(description, "".join(c for c in affiliation if c.isprintable()) or "s")
    cited = yaml.safe_load(citation_file(metadata).decode("utf-8"))
    assert cited["title"] == " ".join(description.title.split())
    assert set(cited) >= {"cff-version", "message", "title", "authors"}
    assert cited["cff-version"] == "1.2.0"


@pytest.mark.parametrize(
    ("text", "address"),
    [
        ("0000-0002-1825-0097", "https://orcid.org/0000-0002-1825-0097"),
        ("https://orcid.org/0000-0002-1825-0097", "https://orcid.org/0000-0002-1825-0097"),
        ("000000021825009 7", None),
        ("0000-0002-1825-0098", None),
        ("0000-0002-1694-233x", "https://orcid.org/0000-0002-1694-233X"),
        ("", None),
        ("javascript:alert(1)", None),
    ],
)
def test_orcids_have_a_form_and_a_check_digit(text: str, address: str | None) -> None:
    """ISO/IEC 7064, MOD 11-2; both valid iDs are examples of ORCID's own documentation (from memory)."""
    assert orcid_address(text) == address


@given(st.text("0123456789", min_size=15, max_size=15), st.integers(0, 9), st.integers(0, 14))
def test_any_single_wrong_digit_of_an_orcid_is_found(digits: str, other: int, place: int) -> None:
    """ISO/IEC 7064: a MOD 11-2 check character finds every single substitution."""
    valid = next(full for c in "0123456789X" if (full := digits + c) and orcid_address(full))
    changed = valid[:place] + str(other) + valid[place + 1 :]
    assert (orcid_address(changed) is not None) == (changed == valid)


def test_licences_are_those_that_citation_files_know() -> None:
    known = set(SCHEMA["definitions"]["license-enum"]["enum"])
    assert {licence.identifier for licence in KNOWN} <= known
    assert len({licence.url for licence in KNOWN}) == len(KNOWN)
    for text in ("cc-by-4.0", " CC-BY-4.0 ", "https://creativecommons.org/licenses/by/4.0"):
        found = find_licence(text)
        assert found is not None
        assert found.identifier == "CC-BY-4.0"
    assert find_licence("") is None
    assert find_licence("my own") is None


def test_the_date_is_the_campaigns_or_the_last_recordings_never_todays() -> None:
    assert (
        citation_day(Description("t", date="2025-03-10", last_day="2025-02-01"), "2025-01-01") == "2025-03-10"
    )
    assert citation_day(Description("t", last_day="2025-02-01"), "2025-01-01") == "2025-02-01"
    assert citation_day(Description("t"), "2025-01-01T12:00:00") == "2025-01-01"
    assert citation_day(Description("t")) == ""


def test_works_cited_are_listed_among_the_sources_of_the_method_page() -> None:
    sources = (ROOT / "site_templates" / "method" / "sources.html").read_text("utf-8")
    for work in REFERENCES:
        lines = [line for line in sources.splitlines() if work.fields["title"] in line]
        assert len(lines) == 1, work.label
        assert f"({work.fields['year']})" in lines[0] or work.label in lines[0]
        assert work.label.endswith(work.fields["year"])
        for family in work.label.removesuffix(work.fields["year"]).split(" and "):
            assert family.strip() in lines[0]
        assert work.fields.get("pages", "").replace("--", "–") in lines[0]
    assert len({work.key for work in REFERENCES}) == len(REFERENCES)


def test_every_citation_of_the_text_for_a_paper_is_a_known_work() -> None:
    text = (ROOT / "site_templates" / "method" / "paper.html").read_text("utf-8")
    labels = re.findall(r"(?:[A-ZŠ][\w-]+(?: and [A-Z][\w-]+)? |JCGM \d+:)\d{4}\b", text)
    assert len(labels) > 20
    assert {work.label for work in cited_in(text)} == set(labels)
    assert bibliography(cited_in(text)).count("@") == len(set(labels))


def test_references_read_like_a_list_of_references() -> None:
    sentences = {work.label: work.sentence for work in REFERENCES}
    assert sentences["Fieller 1954"] == (
        "Fieller, E. C. (1954). Some problems in interval estimation."
        " Journal of the Royal Statistical Society B 16, 175–185."
    )
    assert sentences["Riley 2008"].endswith("NIST Special Publication 1065.")


def test_markup_becomes_plain_text() -> None:
    assert (
        plain_text("<strong>Lines.</strong>  95&nbsp;% of\n<em>a</em> &lt; b") == "**Lines.** 95 % of a < b"
    )


def test_addresses_in_the_crate_are_encoded() -> None:
    assert reference("a b/ü:%.csv") == "a%20b/%C3%BC%3A%25.csv"
    assert media_type("A.CSV") == "text/csv"
    assert media_type("a.strange") == "application/octet-stream"
