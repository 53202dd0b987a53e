"""CITATION.cff, and the texts that can be pasted into a paper.

The citation file follows the Citation File Format 1.2.0. It is YAML; every value is written as a quoted JSON
string, which YAML 1.2 reads as it stands.
"""

from __future__ import annotations

import html
import json
import re

from campaign.analyses.results import CampaignResults
from campaign.pages.citation import citation
from campaign.pages.method import method_pages
from campaign.pages.references import bibliography, cited_in
from campaign.pages.render import environment
from campaign.provenance.metadata import NO_AUTHORS, ArchiveMetadata
from campaign.recordings.description import Author

CITATION_FILE = "CITATION.cff"


def citation_file(metadata: ArchiveMetadata) -> bytes:
    """Return ``CITATION.cff``; what is not known is left out, but for the authors, which are required."""
    lines = [
        "cff-version: 1.2.0",
        f"message: {_quoted('If you use these recordings, tables or figures, please cite them as below.')}",
        "type: dataset",
        f"title: {_quoted(metadata.title)}",
        f"abstract: {_quoted(metadata.marked_summary)}",
        "authors:",
        *(line for author in metadata.authors for line in _author_lines(author)),
    ]
    if not metadata.authors:
        lines.append(f"  - name: {_quoted(NO_AUTHORS)}")
    if metadata.day_is_known:
        lines.append(f"date-released: {_quoted(metadata.day)}")
    if metadata.licence is not None:
        lines.append(f"license: {_quoted(metadata.licence.identifier)}")
    if metadata.origin:
        lines += ["keywords:", f"  - {_quoted(metadata.origin)}"]
    return ("\n".join(lines) + "\n").encode()


def _author_lines(author: Author) -> list[str]:
    """One author; a name is parted into family and given names only where a comma says how."""
    family, comma, given = (part.strip() for part in author.name.partition(","))
    named = {
        "family-names": family if comma else author.name,
        "given-names": given,
        "affiliation": author.affiliation,
        "orcid": author.orcid,
    }
    lines = [f"{key}: {_quoted(value)}" for key, value in named.items() if value]
    return [f"  {'-' if number == 0 else ' '} {line}" for number, line in enumerate(lines)]


def _quoted(text: str) -> str:
    return json.dumps(" ".join(text.split()), ensure_ascii=False)


def paper_texts(results: CampaignResults) -> dict[str, bytes]:
    """Return the texts for a paper by name: methods with their references, data availability, BibTeX."""
    cited = citation(results.description, results.findings.scope.last_day)
    methods = methods_text(results)
    works = cited_in(methods)
    references = "".join(f"- {work.sentence}\n" for work in works)
    listed = f"\n## References\n\n{references}" if works else ""
    return {
        "methods.md": f"# Methods\n\n{methods}{listed}".encode(),
        "data_availability.md": f"# Data availability\n\n{cited.availability}\n".encode(),
        "citation.bib": f"{cited.bibtex}\n".encode(),
        "references.bib": bibliography(works).encode(),
    }


def methods_text(results: CampaignResults) -> str:
    """Return the Method page's text for a paper as plain paragraphs (Markdown)."""
    context = method_pages(results)[0].context
    page = environment().get_template("method/paper.html").render(**context)
    paragraphs = re.findall(r"<p>(.*?)</p>", page, flags=re.DOTALL)
    return "".join(f"{plain_text(paragraph)}\n\n" for paragraph in paragraphs).rstrip("\n") + "\n"


def plain_text(markup: str) -> str:
    """Return a paragraph of HTML as Markdown: strong words stay strong, every other tag goes."""
    strong = re.sub(r"</?strong>", "**", markup)
    bare = html.unescape(re.sub(r"<[^>]+>", "", strong))
    return " ".join(bare.split())
