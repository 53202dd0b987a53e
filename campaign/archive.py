"""Hashes of bytes: what ties every table of a report to the files that it was made from."""

from __future__ import annotations

import hashlib


def sha256_of(data: bytes) -> str:
    """Return the SHA-256 of *data* in lower-case hexadecimal (FIPS 180-4)."""
    return hashlib.sha256(data).hexdigest()
