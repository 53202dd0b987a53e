"""The archive described for machines as an RO-Crate 1.2, and for people by its preview page.

Written with the standard library alone; the tests have the ``rocrate`` package read it. Every entity is flat
and every reference in it leads to an entity, as the specification asks.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import PurePosixPath
from urllib.parse import quote, unquote

from campaign.archive import Content, size_of
from campaign.pages.citation import Citation
from campaign.pages.render import environment
from campaign.pages.slugs import slug
from campaign.provenance.metadata import NO_LICENCE, ArchiveMetadata

Entity = dict[str, object]

METADATA_FILE = "ro-crate-metadata.json"
PREVIEW = "ro-crate-preview.html"
PREVIEW_FILES = "ro-crate-preview_files/"
_SPECIFICATION = "https://w3id.org/ro/crate/1.2"
_MEDIA_TYPES = {
    ".bib": "application/x-bibtex",
    ".cff": "application/yaml",
    ".csv": "text/csv",
    ".html": "text/html",
    ".jpeg": "image/jpeg",
    ".jpg": "image/jpeg",
    ".json": "application/json",
    ".md": "text/markdown",
    ".pdf": "application/pdf",
    ".png": "image/png",
    ".svg": "image/svg+xml",
    ".toml": "application/toml",
    ".tsv": "text/tab-separated-values",
    ".txt": "text/plain",
    ".whl": "application/zip",
    ".zip": "application/zip",
}
_ANYTHING = "application/octet-stream"


@dataclass(frozen=True)
class Part:
    """One folder of the archive as a data set of its own.

    Attributes
    ----------
    path
        From the crate's root, with a slash at the end.
    name, description
        What it is.
    lists_files
        Whether each file of it is an entity of its own.
    """

    path: str
    name: str
    description: str
    lists_files: bool = True


def crate_metadata(
    metadata: ArchiveMetadata,
    citation: Citation,
    parts: Iterable[Part],
    words: Mapping[str, str],
    payload: Mapping[str, Content],
    version: str,
) -> bytes:
    """Return ``ro-crate-metadata.json``.

    Parameters
    ----------
    metadata, citation
        Title, date, licence, authors; how to cite.
    parts
        Folders of the archive; the first is the campaign, whose recordings the others come from.
    words
        What single files at the root (and wherever else it helps) are, by path.
    payload
        Every file of the crate by path; those of the preview are not listed.
    version
        Of the program.
    """
    parts = tuple(parts)
    listed = _files_by_part(parts, payload)
    entities = [
        {
            "@id": METADATA_FILE,
            "@type": "CreativeWork",
            "about": {"@id": "./"},
            "conformsTo": {"@id": _SPECIFICATION},
        },
        _root(metadata, citation, [*(part.path for part in parts), *listed[""]]),
        *(_folder(part, listed[part.path]) for part in parts),
        *(_file(path, words.get(path, ""), payload[path]) for paths in listed.values() for path in paths),
        *_context(metadata),
        *_made_by(parts, version),
    ]
    crate = {"@context": f"{_SPECIFICATION}/context", "@graph": entities}
    return json.dumps(crate, indent=1, ensure_ascii=False).encode() + b"\n"


def _files_by_part(parts: tuple[Part, ...], payload: Mapping[str, Content]) -> dict[str, list[str]]:
    """Files by the innermost part that holds them; those at the root under an empty path."""
    listed: dict[str, list[str]] = {"": [], **{part.path: [] for part in parts}}
    silent = {part.path for part in parts if not part.lists_files}
    innermost = sorted((part.path for part in parts), key=len, reverse=True)
    for path in sorted(payload):
        if path in (METADATA_FILE, PREVIEW) or path.startswith(PREVIEW_FILES):
            continue
        home = next((place for place in innermost if path.startswith(place)), "")
        if home not in silent:
            listed[home].append(path)
    return listed


def _root(metadata: ArchiveMetadata, citation: Citation, holds: list[str]) -> Entity:
    root: Entity = {
        "@id": "./",
        "@type": "Dataset",
        "name": metadata.title,
        "description": _described(metadata),
        "datePublished": metadata.day,
        "license": {"@id": licence_id(metadata)},
        "creditText": citation.sentence,
        "hasPart": _references(reference(path) for path in holds),
        "mentions": {"@id": "#report"},
    }
    if metadata.authors:
        root["author"] = _references(author_id(metadata, k) for k in range(len(metadata.authors)))
    if metadata.origin:
        root["keywords"] = metadata.origin
    return root


def _described(metadata: ArchiveMetadata) -> str:
    """The summary, and what stands in for something that is not known."""
    further = "" if metadata.day_is_known else f" No date is known; {metadata.day} stands in for it."
    return f"{metadata.marked_summary}{further}"


def _folder(part: Part, files: list[str]) -> Entity:
    folder: Entity = {
        "@id": reference(part.path),
        "@type": "Dataset",
        "name": part.name,
        "description": part.description,
    }
    return folder | ({"hasPart": _references(reference(path) for path in files)} if files else {})


def _references(identifiers: Iterable[str]) -> object:
    """References to entities; to a single one as itself, as compact JSON-LD has it."""
    references = [{"@id": identifier} for identifier in identifiers]
    return references[0] if len(references) == 1 else references


def _file(path: str, words: str, content: Content) -> Entity:
    described = {"description": words} if words else {}
    return {
        "@id": reference(path),
        "@type": "File",
        "name": PurePosixPath(path).name,
        **described,
        "encodingFormat": media_type(path),
        "contentSize": str(size_of(content)),
    }


def _context(metadata: ArchiveMetadata) -> Iterator[Entity]:
    """Licence, people and their organisations, and the preview."""
    licence = metadata.licence
    name = licence.name if licence is not None else metadata.licence_text or "No licence stated"
    terms = f"{licence.identifier}: {licence.name}" if licence is not None else metadata.licence_text
    yield {
        "@id": licence_id(metadata),
        "@type": "CreativeWork",
        "name": name,
        "description": terms or NO_LICENCE,
    }
    named: set[str] = set()
    for number, author in enumerate(metadata.authors):
        person: Entity = {"@id": author_id(metadata, number), "@type": "Person", "name": author.name}
        if author.affiliation:
            person["affiliation"] = {"@id": _organisation_id(author.affiliation)}
        if str(person["@id"]) not in named:
            named.add(str(person["@id"]))
            yield person
    for affiliation in sorted({author.affiliation for author in metadata.authors if author.affiliation}):
        yield {"@id": _organisation_id(affiliation), "@type": "Organization", "name": affiliation}
    yield {
        "@id": PREVIEW,
        "@type": "CreativeWork",
        "name": "The report as a site",
        "about": {"@id": "./"},
        "encodingFormat": "text/html",
    }


def _made_by(parts: tuple[Part, ...], version: str) -> Iterator[Entity]:
    """The program, and that it made everything else from the campaign's folder."""
    yield {
        "@id": "#campaign-report",
        "@type": "SoftwareApplication",
        "name": "campaign-report",
        "version": version,
        "url": {"@id": reference("software/")},
    }
    yield {
        "@id": "#report",
        "@type": "CreateAction",
        "name": "Reading, analysis and report of the recordings",
        "instrument": {"@id": "#campaign-report"},
        "object": {"@id": reference(parts[0].path)},
        "result": [{"@id": PREVIEW}, {"@id": reference("tables/")}],
    }


def licence_id(metadata: ArchiveMetadata) -> str:
    """Return the identifier of the licence: its address where it is known, else a place in the crate."""
    return metadata.licence.url if metadata.licence is not None else "#licence"


def author_id(metadata: ArchiveMetadata, number: int) -> str:
    """Return the identifier of an author: the ORCID, else a place in the crate."""
    author = metadata.authors[number]
    return author.orcid or f"#person-{slug(author.name)}"


def _organisation_id(name: str) -> str:
    return f"#organisation-{slug(name)}"


def reference(path: str) -> str:
    """Return *path* as a relative address: everything but letters, digits and a few signs is encoded."""
    return quote(path, safe="/")


def media_type(path: str) -> str:
    """Return the media type that the ending of *path* stands for."""
    return _MEDIA_TYPES.get(PurePosixPath(path).suffix.lower(), _ANYTHING)


def described_paths(crate: bytes) -> list[str]:
    """Return the paths of all files and folders that a crate describes, preview and metadata too.

    Raises
    ------
    ValueError
        Where *crate* is no RO-Crate at all.
    """
    try:
        entities = json.loads(crate)["@graph"]
        by_id = {entity["@id"]: entity for entity in entities}
        root = by_id[by_id[METADATA_FILE]["about"]["@id"]]
        kinds = {key: _kinds_of(entity) for key, entity in by_id.items()}
    except (KeyError, TypeError, ValueError, RecursionError) as fault:
        raise ValueError("it is no RO-Crate: no graph, no descriptor or no root") from fault
    lacking = [key for key in ("name", "description", "datePublished", "license") if not root.get(key)]
    if lacking:
        raise ValueError(f"its root has no {', '.join(lacking)}")
    here = [key for key in by_id if "://" not in key and not key.startswith("#") and key != "./"]
    return [
        unquote(key) for key in here if kinds[key] & {"File", "Dataset"} or key in (PREVIEW, METADATA_FILE)
    ]


def _kinds_of(entity: Mapping[str, object]) -> set[object]:
    kinds = entity["@type"]
    return set(kinds) if isinstance(kinds, list) else {kinds}


def preview_page(metadata: ArchiveMetadata, citation: Citation, parts: Iterable[Part]) -> bytes:
    """Return ``ro-crate-preview.html``: a short page without script that leads to the site."""
    page = environment().get_template("sealed/preview.html")
    shown = page.render(
        metadata=metadata,
        description=_described(metadata),
        citation=citation,
        parts=[(reference(part.path), part) for part in parts],
        licence=metadata.licence,
        no_licence=NO_LICENCE,
        site=f"{PREVIEW_FILES}index.html",
        assets=f"{PREVIEW_FILES}assets",
        metadata_file=METADATA_FILE,
    )
    return shown.encode("utf-8")
