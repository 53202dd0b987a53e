"""What goes into a sealed archive, and where in it each thing lies.

::

    NAME/                          a BagIt bag
      README.txt                   where to begin
      data/                        an RO-Crate
        ro-crate-preview.html      the way to the site
        ro-crate-preview_files/    the site
        campaigns/this_campaign/   the campaign's folder, unaltered; earlier campaigns where its description
                                   says that they are, so that campaign.toml works as it stands
        tables/  records/          every table with its schema; calibration records
        model/  MODEL.md           the fitted models
        software/                  the program's source and wheel, versions and pins
        texts/  CITATION.cff       what a paper needs
        set_aside.csv              every file set aside, and why
"""

from __future__ import annotations

import hashlib
import posixpath
import re
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.archive import (
    CAMPAIGN_LABEL,
    Content,
    check_names,
    chunks_of,
    hash_in_comment_holds,
    names_not_for_windows,
    write_archive,
)
from campaign.notices import CampaignStops, Notice, sort_notices
from campaign.pages import numbers
from campaign.pages.citation import Citation, citation
from campaign.pages.site_tables import CAPTIONS
from campaign.pages.slugs import slug
from campaign.pages.tables import csv_bytes
from campaign.provenance.bag import PAYLOAD, bag_files
from campaign.provenance.citation import CITATION_FILE, citation_file, paper_texts
from campaign.provenance.metadata import ArchiveMetadata, gather_metadata
from campaign.provenance.model_text import MODEL_FOLDER, MODEL_TEXT, model_files
from campaign.provenance.ro_crate import (
    METADATA_FILE,
    PREVIEW,
    PREVIEW_FILES,
    Part,
    crate_metadata,
    preview_page,
)
from campaign.provenance.sealed_text import render_text
from campaign.provenance.software import Software, gather_software
from campaign.recordings.description import DESCRIPTION_FILE
from campaign.recordings.folder import list_files

SOFTWARE = "software/"
TABLES, RECORDS = "tables/", "records/"
SET_ASIDE = "set_aside.csv"
README = "README.md"
_CAMPAIGNS, _OWN = "campaigns", "this_campaign"
_SET_ASIDE_COLUMNS = ("file", "fate", "code", "line", "column", "reason", "done", "remedy")


@dataclass(frozen=True)
class Sealed:
    """An archive before it is written.

    Attributes
    ----------
    files
        Contents by path in the archive.
    notices
        What the metadata lack.
    """

    files: Mapping[str, Content]
    notices: tuple[Notice, ...]


@dataclass(frozen=True)
class Places:
    """Where the campaign's folder and those of earlier campaigns lie in the archive.

    Attributes
    ----------
    own
        Of the campaign.
    earlier
        Place → folder or archive on disk.
    notices
        Earlier campaigns that are not there.
    """

    own: str
    earlier: Mapping[str, Path]
    notices: tuple[Notice, ...] = ()


def check_archive_place(folder: Path, into: Path) -> None:
    """Stop unless an archive of *folder* may be written to *into*.

    Raises
    ------
    CampaignStops
        Where *into* lies inside the campaign (the next archive would hold this one), is a folder, is not in a
        folder that exists, or is a file that this program did not seal.
    """
    whole = into.resolve()
    if whole.is_relative_to(folder.resolve()):
        raise CampaignStops([_place(into, "lies inside the campaign's folder")])
    if into.is_dir() or not whole.parent.is_dir():
        raise CampaignStops([_place(into, "is a folder" if into.is_dir() else "is in no folder that exists")])
    if into.exists() and (not into.is_file() or hash_in_comment_holds(into) is None):
        raise CampaignStops([_place(into, "is there already and is no sealed archive")])


def seal_campaign(folder: Path, results: CampaignResults, site: Mapping[str, bytes]) -> Sealed:
    """Return everything that the archive of a campaign holds.

    Parameters
    ----------
    folder
        The campaign folder, as it was read.
    results
        What its report found out.
    site
        Every file of its site by address.

    Raises
    ------
    CampaignStops
        Where a file changed since it was read, has a name that is not portable, or an earlier campaign is
        named by a path that would mean nothing in an archive.
    """
    description, last_day = results.description, results.findings.scope.last_day
    metadata = gather_metadata(description, _summary(results), last_day)
    cited = citation(description, last_day)
    places = places_of_campaigns(folder, description.earlier)
    software = gather_software()
    parts = [part for part in _parts(places, results) if part is not None]
    payload: dict[str, Content] = {
        **_folder_files(folder, places, results),
        **{PREVIEW_FILES + address: content for address, content in site.items()},
        **{address: content for address, content in site.items() if address.startswith((TABLES, RECORDS))},
        **model_files(results),
        **{f"texts/{name}": content for name, content in paper_texts(results).items()},
        **{SOFTWARE + path: content for path, content in software.files.items()},
        CITATION_FILE: citation_file(metadata),
        SET_ASIDE: csv_bytes(set_aside_table(results)),
        README: _readme(metadata, cited, places, software, results),
        PREVIEW: preview_page(metadata, cited, parts),
    }
    payload[METADATA_FILE] = crate_metadata(
        metadata,
        cited,
        _with_files(parts, payload),
        file_words(payload, places, results),
        payload,
        software.version,
    )
    beside = {
        "README.txt": render_text("README.txt", title=metadata.title, origin=metadata.origin, preview=PREVIEW)
    }
    name = slug(description.title)
    bagged = bag_files(payload, _bag_info(metadata, places, software), beside)
    files = {f"{name}/{path}": content for path, content in bagged.items()}
    check_names(files)
    from_the_lab = _folder_names(files, name)
    told = [
        *metadata.notices,
        *places.notices,
        *earlier_not_followed(results),
        *names_not_for_windows(from_the_lab),
    ]
    return Sealed(files, sort_notices(told))


def _folder_names(files: Iterable[str], name: str) -> list[str]:
    """Names of the files that come from campaigns' folders, from the folder of all campaigns."""
    start = f"{name}/{PAYLOAD}{_CAMPAIGNS}/"
    return [path.removeprefix(start) for path in files if path.startswith(start)]


def earlier_not_followed(results: CampaignResults) -> list[Notice]:
    """Return a notice for each earlier campaign that names others: they are neither compared nor sealed."""
    remedy = "name them in this campaign's description as well, and they are compared and sealed"
    done = "the archive does not hold those"
    return [
        Notice(
            "earlier-not-sealed",
            "noted",
            DESCRIPTION_FILE,
            None,
            None,
            f"the earlier campaign '{one.where}' names earlier campaigns of its own",
            done,
            remedy,
        )
        for one in results.earlier
        if one.names_others
    ]


def write_sealed(sealed: Sealed, into: Path) -> None:
    """Write an archive whole or not at all.

    Raises
    ------
    CampaignStops
        Where a file of the campaign changed while it was being packed.
    """
    sources = {content for content in sealed.files.values() if isinstance(content, Path)}
    before = {source: _state(source) for source in sources}
    aside = into.with_name(f".{into.name}.sealing")
    try:
        write_archive(sealed.files, aside)
        if changed := sorted(str(source) for source in sources if _state(source) != before[source]):
            raise CampaignStops([_changed(Path(source).name) for source in changed])
        aside.replace(into)
    finally:
        aside.unlink(missing_ok=True)


def _state(source: Path) -> tuple[int, int]:
    status = source.stat()
    return status.st_size, status.st_mtime_ns


def _changed(name: str) -> Notice:
    what = "the file changed after it was read"
    remedy = "seal again when nothing writes to the folder"
    return Notice("changed-while-sealed", "stops", name, None, None, what, "nothing is sealed", remedy)


def _place(into: Path, what: str) -> Notice:
    remedy = "name a new file beside the campaign's folder with --into"
    said = f"the archive {into.name} {what}"
    return Notice("archive-place", "stops", None, None, None, said, "nothing is sealed", remedy)


def _summary(results: CampaignResults) -> str:
    """What was measured, in one sentence, for a campaign that does not describe itself."""
    scope, counts = results.findings.scope, results.intake.counts
    days = f", {scope.first_day} to {scope.last_day}" if scope.first_day else ""
    return (
        f"Recordings of {numbers.count(scope.sensors, 'sensor')} of"
        f" {numbers.count(scope.modules, 'module')} ({numbers.count(counts.trials_used, 'trial')}){days},"
        " with their description, every table, the fitted models and the report as a site."
    ).replace("\u00a0", " ")


def places_of_campaigns(folder: Path, earlier: tuple[Mapping[str, str], ...]) -> Places:
    """Return where the campaign and the earlier campaigns that it names go.

    The campaign's own folder lies as deep as the farthest climb of those names, so that every one of them
    leads to the same campaign inside the archive.

    Raises
    ------
    CampaignStops
        Where an earlier campaign is named by an absolute path, or by backslashes.
    """
    named = [value for table in earlier for key in ("folder", "archive") if (value := table.get(key))]
    if faults := [_named_by(path) for path in named if _means_nothing_elsewhere(path)]:
        raise CampaignStops(faults)
    relative = [posixpath.normpath(path) for path in named]
    depth = max((path.split("/").count("..") for path in relative), default=0)
    above = [_CAMPAIGNS, *["up"] * (depth - 1)]
    own = "/".join([*above, _OWN])
    while any(_within(posixpath.normpath(f"{own}/{path}"), own) for path in relative if path[:2] == ".."):
        own += "_"
    there = {posixpath.normpath(f"{own}/{path}"): folder / path for path in relative}
    missing = [_not_there(str(place.name)) for place in there.values() if not place.exists()]
    return Places(
        own, {place: disk for place, disk in sorted(there.items()) if disk.exists()}, tuple(missing)
    )


def _means_nothing_elsewhere(path: str) -> bool:
    return path.startswith("/") or "\\" in path or re.match(r"[A-Za-z]:", path) is not None


def _within(path: str, folder: str) -> bool:
    return path == folder or path.startswith(f"{folder}/")


def _named_by(path: str) -> Notice:
    what = f"an earlier campaign is named by '{path}', which means nothing on another machine"
    remedy = 'name it from the campaign\'s folder with forward slashes, such as "../2025_first_process"'
    return Notice(
        "earlier-not-sealed", "stops", DESCRIPTION_FILE, None, None, what, "nothing is sealed", remedy
    )


def _not_there(name: str) -> Notice:
    what = f"the earlier campaign '{name}' is not there"
    done, remedy = "the archive does not hold it", "put it where campaign.toml says"
    return Notice("earlier-not-sealed", "noted", DESCRIPTION_FILE, None, None, what, done, remedy)


def _folder_files(folder: Path, places: Places, results: CampaignResults) -> dict[str, Content]:
    """Every ordinary file of the campaign and of earlier ones, by its place; unaltered since it was read."""
    files = {places.own: dict(list_files(folder))}
    files |= {place: dict(list_files(disk)) for place, disk in places.earlier.items() if disk.is_dir()}
    read: dict[str, Mapping[str, str]] = {places.own: results.intake.file_hashes}
    read |= {posixpath.normpath(f"{places.own}/{one.where}"): one.hashes for one in results.earlier}
    changed = [
        name
        for place, found in files.items()
        for name, disk in found.items()
        if name in (hashes := read.get(place, {})) and _sha256(disk) != hashes[name]
    ]
    if changed:
        raise CampaignStops([_changed(name) for name in changed])
    archives: dict[str, Content] = {p: disk for p, disk in places.earlier.items() if not disk.is_dir()}
    return archives | {f"{p}/{name}": disk for p, found in files.items() for name, disk in found.items()}


def _sha256(file: Path) -> str:
    digest = hashlib.sha256()
    for chunk in chunks_of(file):
        digest.update(chunk)
    return digest.hexdigest()


def set_aside_table(results: CampaignResults) -> pd.DataFrame:
    """Return every file set aside, and every part of a file, with its reason.

    Columns: file, fate of the file as a whole, code, line, column, reason, done, remedy.
    """
    recordings = results.intake.recordings
    fates = dict(zip(recordings["file"], recordings["fate"], strict=True))
    rows: list[tuple[object, ...]] = [
        (n.file or "", fates.get(n.file or "", ""), n.code, n.line, n.column, n.what, n.done, n.remedy)
        for n in results.notices
        if n.weight == "set aside"
    ]
    told = {row[0] for row in rows}
    rows += [
        (file, fate, "", None, None, "see its notices in tables/notices.csv", "not used", "")
        for file, fate in fates.items()
        if fate == "set aside" and file not in told
    ]
    rows.sort(key=lambda row: (str(row[0]), str(row[2])))
    frame = pd.DataFrame(rows, columns=list(_SET_ASIDE_COLUMNS))
    return frame.astype({"line": "Int64", "column": "Int64"})


def _parts(places: Places, results: CampaignResults) -> Iterator[Part | None]:
    files = results.intake.counts
    recordings = numbers.count(files.files, "file").replace("\u00a0", " ")
    yield Part(
        f"{places.own}/",
        "The campaign",
        f"The campaign's folder, unaltered: {recordings} with recordings, description, registers and notes.",
    )
    for place, disk in places.earlier.items():
        if disk.is_dir():
            yield Part(f"{place}/", f"Earlier campaign {disk.name}", "Joined for comparison; unaltered.")
    yield Part(TABLES, "Tables", "Every table of the report as CSV; names, units and types in schema.json.")
    if results.calibration is not None and results.calibration.records:
        yield Part(RECORDS, "Calibration records", "One file a sensor and branch, with its covariance.")
    models = "Design and covariances of every nested fit, covariances of shapes; explained in MODEL.md."
    yield Part(MODEL_FOLDER, "Models", models)
    yield Part(SOFTWARE, "Software", "The program's source and wheel, and the versions that it ran with.")
    yield Part(f"{SOFTWARE}source/", "Source of the program", "It can be installed with pip.", False)
    yield Part("texts/", "Texts for a paper", "Methods with references, data availability, BibTeX.")


def _with_files(parts: list[Part], payload: Mapping[str, Content]) -> list[Part]:
    """The parts that hold a file."""
    return [part for part in parts if any(path.startswith(part.path) for path in payload)]


_WORDS = {
    README: "For people: what is in the archive, how to verify it, how to compute everything again.",
    MODEL_TEXT: "The fitted models in symbols.",
    CITATION_FILE: "How to cite, in the Citation File Format.",
    SET_ASIDE: "Every file set aside, and why.",
    f"{TABLES}schema.json": "Columns of every table: name, type, unit, meaning (tabular data package).",
    f"{SOFTWARE}requirements.txt": "Exact versions of the packages that the program ran with.",
    f"{SOFTWARE}versions.json": "Versions of the program, of Python and of the packages.",
    "texts/methods.md": "Methods, ready for a paper, with references.",
    "texts/data_availability.md": "A data-availability sentence.",
    "texts/citation.bib": "How to cite, for BibTeX.",
    "texts/references.bib": "The works that the methods cite, for BibTeX.",
}
_WORDS_BY_PLACE = (
    (RECORDS, "Calibration record of one sensor and branch."),
    (SOFTWARE, "The program as a wheel."),
    (MODEL_FOLDER, "Design or covariance of a fitted model; MODEL.md explains it."),
    (TABLES, "Table of the report; schema.json explains its columns."),
)


def file_words(paths: Iterable[str], places: Places, results: CampaignResults) -> dict[str, str]:
    """Return what each file is, in a few words, by its path in the crate."""
    recordings = results.intake.recordings
    fates = {
        f"{places.own}/{file}": f"{kind or 'A'} recording, {fate}." if fate != _NO_RECORDING else _KEPT
        for file, kind, fate in zip(recordings["file"], recordings["kind"], recordings["fate"], strict=True)
    }
    tables = {f"{TABLES}{name}.csv": caption for name, caption in CAPTIONS.items()}
    known = {**fates, **tables, **_WORDS}
    return {path: known.get(path) or _by_place(path) for path in paths}


_NO_RECORDING = "not a recording"
_KEPT = "A file of the campaign's folder that is no recording."


def _by_place(path: str) -> str:
    return next((words for place, words in _WORDS_BY_PLACE if path.startswith(place)), _EARLIER)


_EARLIER = "A file of an earlier campaign."


def _readme(
    metadata: ArchiveMetadata,
    cited: Citation,
    places: Places,
    software: Software,
    results: CampaignResults,
) -> bytes:
    return render_text(
        README,
        metadata=metadata,
        citation=cited,
        own=places.own,
        earlier=list(places.earlier),
        software=software,
        preview=PREVIEW,
        site=f"{PREVIEW_FILES}index.html",
        counts=results.intake.counts,
        rehearsal=results.description.rehearsal,
        payload=PAYLOAD,
    )


def _bag_info(metadata: ArchiveMetadata, places: Places, software: Software) -> dict[str, str]:
    affiliations = sorted({author.affiliation for author in metadata.authors if author.affiliation})
    return {
        "Sealed-By": f"campaign-report {software.version}",
        "Bagging-Date": metadata.day if metadata.day_is_known else "",
        "Source-Organization": "; ".join(affiliations),
        "Contact-Name": "; ".join(author.name for author in metadata.authors),
        "External-Description": f"{metadata.title}. {metadata.marked_summary}",
        CAMPAIGN_LABEL: f"{PAYLOAD}{places.own}",
    }
