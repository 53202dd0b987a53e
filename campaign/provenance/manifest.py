"""Manifests of hashes: lists that ``sha256sum --check`` reads, of the campaign's files and of the site's."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping

from campaign.pages.provenance import CAMPAIGN_CHECKSUMS, SITE_CHECKSUMS


def with_manifests(site: Mapping[str, bytes], campaign_hashes: Mapping[str, str]) -> dict[str, bytes]:
    """Return the files of a site together with both lists of hashes.

    Parameters
    ----------
    site
        Bytes of every file of the site by its address.
    campaign_hashes
        SHA-256 by path of the campaign's files that were opened.

    Returns
    -------
    dict
        The site's files, sorted. The list of the site's own files holds all of them but itself and the marker
        file.
    """
    files = {**site, CAMPAIGN_CHECKSUMS: checksum_list(campaign_hashes)}
    hashes = {address: hashlib.sha256(content).hexdigest() for address, content in files.items()}
    return dict(sorted({**files, SITE_CHECKSUMS: checksum_list(hashes)}.items()))


def checksum_list(hashes: Mapping[str, str]) -> bytes:
    """Return the list of *hashes* by path, sorted, as GNU coreutils write and check it.

    A path with a backslash or a line break is escaped, and its line then begins with a backslash.
    """
    return "".join(_line(path, hashes[path]) for path in sorted(hashes)).encode("utf-8")


def _line(path: str, digest: str) -> str:
    escaped = path.replace("\\", "\\\\").replace("\n", "\\n").replace("\r", "\\r")
    return f"{'' if escaped == path else chr(92)}{digest}  {escaped}\n"
