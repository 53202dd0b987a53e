"""A BagIt bag around the sealed files (RFC 8493, version 1.0), written and checked.

The standard library is enough: a bag is a few text files. The tests have the ``bagit`` package validate it.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

from campaign.archive import BAG_INFO, Content, sha512_of, size_of

PAYLOAD = "data/"
DECLARATION = "bagit.txt"
MANIFEST = "manifest-sha512.txt"
TAG_MANIFEST = "tagmanifest-sha512.txt"
_DECLARED = "BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"


@dataclass(frozen=True)
class BagFault:
    """One thing that is wrong with a bag: the file (from the bag's folder) and what is wrong with it."""

    file: str
    wrong: str


def bag_files(
    payload: Mapping[str, Content], info: Mapping[str, str], beside: Mapping[str, bytes] | None = None
) -> dict[str, Content]:
    """Return all files of a bag by their paths from its folder.

    Parameters
    ----------
    payload
        Contents by path from the payload folder.
    info
        Labels and values of ``bag-info.txt``; ``Payload-Oxum`` is added.
    beside
        Further tag files (a first word for humans), hashed with the other tag files.
    """
    oxum = f"{sum(size_of(content) for content in payload.values())}.{len(payload)}"
    hashes = {PAYLOAD + path: sha512_of(content) for path, content in payload.items()}
    tags = {
        DECLARATION: _DECLARED.encode(),
        BAG_INFO: _info_text({**info, "Payload-Oxum": oxum}).encode(),
        MANIFEST: manifest_text(hashes).encode(),
        **(beside or {}),
    }
    tag_hashes = {path: hashlib.sha512(content).hexdigest() for path, content in tags.items()}
    inside = {PAYLOAD + path: content for path, content in payload.items()}
    return {**tags, TAG_MANIFEST: manifest_text(tag_hashes).encode(), **inside}


def manifest_text(hashes: Mapping[str, str]) -> str:
    """Return a manifest: hash and path, a line a file; ``%``, CR and LF in paths are encoded (§2.1.3)."""
    return "".join(f"{hashes[path]}  {_encoded(path)}\n" for path in sorted(hashes))


def read_manifest(text: str) -> dict[str, str]:
    """Return the hashes of a manifest by path.

    Raises
    ------
    ValueError
        Where a line is no hash and path.
    """
    hashes = {}
    for number, line in enumerate(text.splitlines(), 1):
        digest, _, path = line.partition(" ")
        if not path.strip() or not digest:
            raise ValueError(f"line {number} is no hash and path")
        hashes[_decoded(path.removeprefix("*").strip())] = digest.lower()
    return hashes


def check_bag(folder: Path) -> list[BagFault]:
    """Return everything that is wrong with the bag in *folder*; an empty list where it is complete and valid.

    Every changed, missing and extra file is named, tag files too.
    """
    files, links = files_below(folder)
    faults = [BagFault(name, "is a link; sealed archives hold none") for name in links]
    faults += _declaration_faults(files)
    listed = {name: _manifest_of(files, name, faults) for name in (MANIFEST, TAG_MANIFEST)}
    faults += _hash_faults(files, listed[MANIFEST], "differs from what was sealed")
    faults += _hash_faults(files, listed[TAG_MANIFEST], _OR_ITS_LIST)
    known = {*listed[MANIFEST], *listed[TAG_MANIFEST], TAG_MANIFEST}
    faults += [BagFault(name, "is not in the manifest: an extra file") for name in files if name not in known]
    faults += _oxum_faults(files)
    return faults


def files_below(folder: Path) -> tuple[dict[str, Path], tuple[str, ...]]:
    """Return every ordinary file below *folder* by its path, sorted, and the names of links, not followed."""
    files, links = {}, []
    for place, folders, names in os.walk(folder):
        for name in sorted([*folders, *names]):
            path = Path(place) / name
            if path.is_symlink():
                links.append(path.relative_to(folder).as_posix())
            elif path.is_file():
                files[path.relative_to(folder).as_posix()] = path
    return dict(sorted(files.items())), tuple(sorted(links))


def _declaration_faults(files: Mapping[str, Path]) -> Iterator[BagFault]:
    if DECLARATION not in files:
        yield BagFault(DECLARATION, "is missing")
    elif files[DECLARATION].read_bytes() != _DECLARED.encode():
        yield BagFault(DECLARATION, "does not declare a bag of version 1.0 in UTF-8")


def _manifest_of(files: Mapping[str, Path], name: str, faults: list[BagFault]) -> dict[str, str]:
    if name not in files:
        faults.append(BagFault(name, "is missing"))
        return {}
    try:
        return read_manifest(files[name].read_text("utf-8"))
    except ValueError as fault:
        faults.append(BagFault(name, f"cannot be read as a manifest ({fault})"))
        return {}


_OR_ITS_LIST = f"differs from what was sealed (or {TAG_MANIFEST} does, which nothing else lists)"


def _hash_faults(files: Mapping[str, Path], hashes: Mapping[str, str], differs: str) -> Iterator[BagFault]:
    for name, digest in sorted(hashes.items()):
        if name not in files:
            yield BagFault(name, "is missing")
        elif sha512_of(files[name]) != digest:
            yield BagFault(name, differs)


def _oxum_faults(files: Mapping[str, Path]) -> Iterator[BagFault]:
    if BAG_INFO not in files:
        return
    said = read_info(files[BAG_INFO].read_text("utf-8", errors="replace")).get("Payload-Oxum", "")
    inside = [path.stat().st_size for name, path in files.items() if name.startswith(PAYLOAD)]
    if said != (found := f"{sum(inside)}.{len(inside)}"):
        yield BagFault(BAG_INFO, f"says Payload-Oxum {said or '(nothing)'}, found {found} (bytes.files)")


def read_info(text: str) -> dict[str, str]:
    """Return labels and values of ``bag-info.txt``; a value may go on in lines that begin with a blank."""
    info: dict[str, str] = {}
    label = ""
    for line in text.splitlines():
        if line[:1] in (" ", "\t") and label:
            info[label] += " " + line.strip()
        else:
            label, _, value = line.partition(":")
            info[label] = value.strip()
    return info


def _info_text(info: Mapping[str, str]) -> str:
    return "".join(f"{label}: {_one_line(value)}\n" for label, value in info.items() if value)


def _one_line(value: str) -> str:
    return " ".join(value.split())


def _encoded(path: str) -> str:
    for sign in ("%", "\n", "\r"):
        path = path.replace(sign, f"%{ord(sign):02X}")
    return path


def _decoded(path: str) -> str:
    for sign in ("\n", "\r", "%"):
        path = path.replace(f"%{ord(sign):02X}", sign).replace(f"%{ord(sign):02x}", sign)
    return path
