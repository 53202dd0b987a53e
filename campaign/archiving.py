"""Sealing a campaign with its report into one archive, and verifying one, by hashes and by doing it again."""

from __future__ import annotations

import sys
import tempfile
from dataclasses import replace
from pathlib import Path

from campaign.archive import campaign_in, hash_in_comment_holds, sha512_of, unpack_what_is_whole
from campaign.campaign_reading import silent
from campaign.notices import CampaignStops, Notice
from campaign.pipeline import make_site
from campaign.provenance.bag import BagFault
from campaign.provenance.comparing import SCHEMA, compare_tables
from campaign.provenance.refitting import refit_from_readings
from campaign.provenance.sealing import TABLES, check_archive_place, seal_campaign, write_sealed
from campaign.provenance.verifying import (
    ARCHIVE,
    WHAT_HASHES_SHOW,
    Recomputation,
    Verification,
    recomputation_lines,
    sealed_tables,
    verification_lines,
    verify_folder,
)
from campaign.recordings.inspection import notice_lines, print_lines
from campaign.recordings.shared_reading import Progress
from campaign.workers.workshop import Workshop

DONE, DIFFERS = 0, 1
"""Exit statuses."""


def seal(folder: Path, into: Path, progress: Progress | None = None, workshop: Workshop | None = None) -> int:
    """Read and analyse the campaign in *folder* and seal everything into the zip file *into*.

    The same folder gives the same bytes. Nothing is written where anything stops.

    Returns
    -------
    int
        Exit status: 0 done.

    Raises
    ------
    CampaignStops
        Where the campaign cannot be read or sealed, or *into* is not ours to write.
    """
    tell = progress or silent
    check_archive_place(folder, into)
    results, site = make_site(folder, None, tell, workshop)
    tell("sealing", 0, 1)
    sealed = seal_campaign(folder, results, site)
    write_sealed(sealed, into)
    tell("sealing", 1, 1)
    sys.stdout.write(print_lines(notice_lines(sealed.notices)))
    print(f"{into} holds {len(sealed.files)} files, {into.stat().st_size} bytes; its SHA-512:")
    print(f"  {sha512_of(into)}")
    print(f"{WHAT_HASHES_SHOW}\nVerify it with: campaign verify {into}")
    return DONE


def verify(
    target: Path, recompute: bool, progress: Progress | None = None, workshop: Workshop | None = None
) -> int:
    """Verify a sealed archive (a zip file, or the folder it was unpacked to) or a site, and say what differs.

    Parameters
    ----------
    target
        What to verify; it is not altered.
    recompute
        Whether to read and analyse the recordings in the archive again and compare every figure.
    progress, workshop
        As in :func:`read_campaign`; nothing kept by earlier runs should be in the workshop.

    Returns
    -------
    int
        Exit status: 0 everything agrees, 1 something differs.

    Raises
    ------
    CampaignStops
        Where *target* cannot be read, is refused, or holds nothing to recompute.
    """
    with tempfile.TemporaryDirectory(prefix="campaign-verify-") as space:
        folder, damaged = _opened(target, Path(space) / "archive")
        found = verify_folder(folder)
        faults = _named_once([*damaged, *found.faults])
        found = replace(found, faults=faults, remarks=(*found.remarks, *_packing_remarks(target)))
        sys.stdout.write(print_lines(verification_lines(found, target.name)))
        again = recompute_archive(found, progress, workshop) if recompute else None
        if again is not None:
            sys.stdout.write(print_lines(recomputation_lines(again)))
    print(WHAT_HASHES_SHOW)
    return DIFFERS if found.faults or (again is not None and not again.agrees) else DONE


def _opened(target: Path, space: Path) -> tuple[Path, list[BagFault]]:
    """Where *target* lies unpacked, and what of its zip file is damaged."""
    if target.is_dir():
        return target, []
    unpacked = unpack_what_is_whole(target, space)
    home = unpacked.folder.relative_to(space).as_posix()
    faults = [
        BagFault((notice.file or "").removeprefix(f"{home}/"), "is damaged in the zip file")
        for notice in unpacked.damaged
    ]
    if hash_in_comment_holds(target) is False:
        faults.append(BagFault(target.name, "is not, byte by byte, the zip file that was sealed"))
    return unpacked.folder, faults


def _named_once(faults: list[BagFault]) -> tuple[BagFault, ...]:
    """Faults with the first of each file alone."""
    first: dict[str, BagFault] = {}
    for fault in faults:
        first.setdefault(fault.file, fault)
    return tuple(first.values())


def _packing_remarks(target: Path) -> list[str]:
    if target.is_dir() or hash_in_comment_holds(target) is not None:
        return []
    return ["another program packed this zip file: its contents are looked at, not its own bytes"]


def recompute_archive(
    found: Verification, progress: Progress | None = None, workshop: Workshop | None = None
) -> Recomputation:
    """Read and analyse the recordings of an unpacked archive again, and compare with what it holds.

    Raises
    ------
    CampaignStops
        Where it holds no recordings, or they cannot be read.
    """
    if found.kind != ARCHIVE:
        what = f"a {found.kind} holds no recordings"
        remedy = "name a sealed archive, or leave out --recompute"
        done = "nothing is computed again"
        raise CampaignStops([Notice("nothing-to-recompute", "stops", None, None, None, what, done, remedy)])
    _, site = make_site(campaign_in(found.folder), None, progress, workshop)
    sealed = sealed_tables(found.folder)
    made = {address.removeprefix(TABLES): site[address] for address in site if address.startswith(TABLES)}
    parts = [sealed.get(name) for name in ("readings.csv", SCHEMA, "fit_certificates.csv")]
    refits = refit_from_readings(*parts) if None not in parts else ()  # type: ignore[arg-type]
    return Recomputation(compare_tables(sealed, made), refits)
