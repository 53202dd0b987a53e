"""Whether a sealed archive, or a site, is what was sealed: hashes and structure, every fault by its name."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from campaign import __version__
from campaign.archive import BAG_INFO, CAMPAIGN_LABEL, chunks_of
from campaign.notices import CampaignStops, Notice
from campaign.pages.provenance import SITE_CHECKSUMS
from campaign.provenance.bag import DECLARATION, PAYLOAD, BagFault, check_bag, files_below, read_info
from campaign.provenance.comparing import TOLERANCES, TableComparison
from campaign.provenance.refitting import Refit
from campaign.provenance.ro_crate import METADATA_FILE, PREVIEW_FILES, described_paths
from campaign.provenance.sealing import RECORDS, SOFTWARE, TABLES
from campaign.provenance.software import pinned_requirements, running_project
from campaign.recordings.folder import OUTPUT_MARKER
from campaign.recordings.register import shown

ARCHIVE, SITE = "sealed archive", "site"
MOST_SHOWN = 40
"""Faults that are printed one by one; the rest is counted."""

MOST_OF_A_TABLE = 4
"""Differences of one table that are printed one by one."""

WHAT_HASHES_SHOW = (
    "The hashes show that nothing changed since sealing. They do not show when or by whom: deposit the"
    " archive where a date is kept."
)


@dataclass(frozen=True)
class Verification:
    """What verifying came to.

    Attributes
    ----------
    kind
        ``"sealed archive"`` or ``"site"``.
    folder
        Where it lies, unpacked.
    files
        How many files it holds.
    version
        Of the program that made it, empty where not known.
    faults
        Everything that is not as it was sealed.
    remarks
        What a reader should know and is no fault.
    """

    kind: str
    folder: Path
    files: int
    version: str
    faults: tuple[BagFault, ...]
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class Recomputation:
    """What computing everything again came to.

    Attributes
    ----------
    tables
        Each table compared.
    refits
        The main model of each generation, fitted again from ``readings.csv`` alone; empty without one.
    """

    tables: tuple[TableComparison, ...]
    refits: tuple[Refit, ...]

    @property
    def agrees(self) -> bool:
        """Whether every figure is within its tolerance and every fit agrees."""
        return not any(table.differences for table in self.tables) and all(r.agrees for r in self.refits)


def verify_folder(folder: Path) -> Verification:
    """Verify an unpacked archive, or a site.

    Raises
    ------
    CampaignStops
        Where *folder* is neither.
    """
    home = _home(folder)
    if (home / DECLARATION).is_file() or (home / BAG_INFO).is_file():
        return _verify_archive(home)
    if (home / SITE_CHECKSUMS).is_file():
        return _verify_site(home)
    what = f"'{folder.name}' is neither a sealed archive nor a site"
    remedy = "name what campaign seal wrote, the folder it was unpacked to, or a site of campaign report"
    notice = Notice("archive-unknown", "stops", None, None, None, what, "nothing is verified", remedy)
    raise CampaignStops([notice])


def _home(folder: Path) -> Path:
    """The folder itself, the only one in it that holds a bag, or the bag whose payload it is."""
    if (folder / DECLARATION).is_file() or (folder / SITE_CHECKSUMS).is_file():
        return folder
    above = folder.resolve().parent
    if folder.resolve() == above / PAYLOAD.rstrip("/") and (above / DECLARATION).is_file():
        return above
    inside = [place.parent for place in sorted(folder.glob(f"*/{DECLARATION}"))]
    return inside[0] if len(inside) == 1 else folder


def _verify_archive(home: Path) -> Verification:
    files, _ = files_below(home)
    info = read_info(files[BAG_INFO].read_text("utf-8", errors="replace")) if BAG_INFO in files else {}
    faults = [*check_bag(home), *_crate_faults(files), *_copy_faults(files), *_campaign_faults(files, info)]
    version = info.get("Sealed-By", "").removeprefix("campaign-report ")
    remarks = tuple(version_remarks(version, sealed_versions(home)))
    return Verification(ARCHIVE, home, len(files), version, tuple(faults), remarks)


def version_remarks(version: str, packages: dict[str, str]) -> Iterator[str]:
    """Say where another version of the program, or of what it stands on, made the archive.

    Parameters
    ----------
    version
        Of the program that sealed it; empty where not known.
    packages
        Versions of the packages that it ran with.
    """
    if version and version != __version__:
        yield (
            f"sealed by version {version}, looked at by version {__version__}: figures may differ for that"
            " alone; the sealed program is in software/"
        )
    here = dict(pin.split("==", 1) for pin in pinned_requirements(running_project()))
    others = [
        f"{name} {then} (here {here[name]})"
        for name, then in sorted(packages.items())
        if here.get(name, then) != then
    ]
    if others:
        yield f"sealed with other packages: {', '.join(others)}; software/requirements.txt names them all"


def _crate_faults(files: dict[str, Path]) -> Iterator[BagFault]:
    name = PAYLOAD + METADATA_FILE
    if name not in files:
        return
    try:
        described = described_paths(files[name].read_bytes())
    except ValueError as fault:
        yield BagFault(name, f"cannot be used: {fault}")
        return
    for path in described:
        inside = PAYLOAD + path
        if inside not in files and not (path.endswith("/") and any(f.startswith(inside) for f in files)):
            yield BagFault(name, f"describes '{path}', which is not there")


def _copy_faults(files: dict[str, Path]) -> Iterator[BagFault]:
    """Tables and records stand twice, by themselves and in the site: both must be the same."""
    for name, path in files.items():
        inside = name.removeprefix(PAYLOAD)
        if name.startswith((PAYLOAD + TABLES, PAYLOAD + RECORDS)):
            twin = files.get(f"{PAYLOAD}{PREVIEW_FILES}{inside}")
            if twin is not None and twin.read_bytes() != path.read_bytes():
                yield BagFault(name, "is not the same as the site's own copy")


def _campaign_faults(files: dict[str, Path], info: dict[str, str]) -> Iterator[BagFault]:
    place = info.get(CAMPAIGN_LABEL, "")
    if BAG_INFO in files and f"{place}/campaign.toml" not in files:
        yield BagFault(BAG_INFO, f"{CAMPAIGN_LABEL} '{place}' holds no campaign.toml")


def _verify_site(home: Path) -> Verification:
    """A site by the list of hashes that it carries; the list itself and the marker are not in it."""
    files, links = files_below(home)
    faults = [BagFault(name, "is a link") for name in links]
    known = {SITE_CHECKSUMS, OUTPUT_MARKER}
    for line in files[SITE_CHECKSUMS].read_text("utf-8", errors="replace").splitlines():
        digest, name = _listed(line)
        known.add(name)
        if name not in files:
            faults.append(BagFault(name, "is missing"))
        elif _sha256(files[name]) != digest:
            faults.append(BagFault(name, "differs from what was written"))
    faults += [BagFault(name, "is not in the list: an extra file") for name in files if name not in known]
    return Verification(SITE, home, len(files), "", tuple(faults))


def _listed(line: str) -> tuple[str, str]:
    """Hash and name of a line of ``sha256sum``; a line that begins with a backslash has an escaped name."""
    digest, _, name = line.removeprefix("\\").partition("  ")
    if line.startswith("\\"):
        for escape, sign in (("\\n", "\n"), ("\\r", "\r"), ("\\\\", "\\")):
            name = name.replace(escape, sign)
    return digest, name


def _sha256(file: Path) -> str:
    digest = hashlib.sha256()
    for chunk in chunks_of(file):
        digest.update(chunk)
    return digest.hexdigest()


def sealed_tables(home: Path) -> dict[str, bytes]:
    """Return the sealed tables by file name, their schema among them."""
    folder = home / PAYLOAD / TABLES
    return {
        path.name: path.read_bytes() for path in sorted(folder.glob("*")) if path.suffix in (".csv", ".json")
    }


def sealed_versions(home: Path) -> dict[str, str]:
    """Return the versions of the packages that the sealed program ran with; empty where not known."""
    try:
        found = json.loads((home / PAYLOAD / SOFTWARE / "versions.json").read_bytes())["packages"]
        return {str(name): str(version) for name, version in found.items()}
    except (OSError, ValueError, KeyError, AttributeError, TypeError):
        return {}


def verification_lines(found: Verification, name: str) -> list[str]:
    """Return what verifying came to, for a reader."""
    by = f", made by campaign-report {found.version}" if found.version else ""
    lines = [f"{name}: a {found.kind}, {found.files} files{by}"]
    lines += [f"  {remark}" for remark in found.remarks]
    if found.faults:
        many = len(found.faults)
        lines.append(
            f"hashes and structure: {many} {'thing is' if many == 1 else 'things are'} not as sealed"
        )
        lines += _shown([f"  {fault.file} {fault.wrong}" for fault in found.faults])
    else:
        lines.append("hashes and structure: nothing differs")
    return [shown(line) for line in lines]


def recomputation_lines(found: Recomputation) -> list[str]:
    """Return what computing everything again came to, for a reader."""
    figures = sum(table.figures for table in found.tables)
    same = sum(table.same_bytes for table in found.tables)
    differences = [difference for table in found.tables for difference in table.differences]
    lines = [
        f"computed again from the recordings: {len(found.tables)} tables, {figures} figures;"
        f" {same} tables are the same to the byte"
    ]
    if differences:
        lines.append(f"{len(differences)} {'figure lies' if len(differences) == 1 else 'figures lie'} apart:")
        for table in sorted(found.tables, key=_nearness):
            lines += _shown([f"  {difference.sentence}" for difference in table.differences], MOST_OF_A_TABLE)
    else:
        lines.append("every figure agrees within its tolerance")
    lines.append("tolerances:")
    lines += [f"  {kind.kind}: {kind.words}" for kind in TOLERANCES]
    lines += [f"{'' if refit.agrees else 'DIFFERS: '}{refit.sentence}" for refit in found.refits]
    return [shown(line) for line in lines]


def _nearness(table: TableComparison) -> tuple[int, str]:
    """Tables nearest to the recordings first: what differs there is why the others do."""
    nearest = ("recordings", "trials", "notices", "readings", "run_lines", "sensor_lines")
    return (nearest.index(table.table) if table.table in nearest else len(nearest)), table.table


def _shown(lines: list[str], most: int = MOST_SHOWN) -> list[str]:
    more = len(lines) - most
    return [*lines[:most], *([f"  and {more} more"] if more > 0 else [])]
