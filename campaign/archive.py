"""Sealed archives as files: hashing, writing the same bytes for the same input, and unpacking with care.

An archive is a zip file (PKWARE APPNOTE 6.3) that holds nothing but plain files under one folder. What is
written here has fixed times, permissions, order and compression, so that its bytes depend on the contents
alone (and on the build of zlib that deflates them). Its comment carries the SHA-512 of all that stands before
that hash, so that a changed byte is noticed even where no content is.

What is unpacked comes from somewhere: every name is looked at before the first byte is written.
"""

from __future__ import annotations

import hashlib
import io
import os
import re
import stat
import unicodedata
import zipfile
import zlib
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import IO

from campaign.notices import CampaignStops, Notice

Content = bytes | Path
"""Bytes of a member, or the file that holds them."""

MOST_MEMBERS = 500_000
"""More members than this are not unpacked."""

MOST_BYTES = 64 * 2**30
"""An archive that unpacks to more than this (64 GiB) is not unpacked."""

MOST_TIMES_SMALLER = 200
"""A member may be this many times larger than its share of the archive; text rarely passes 20."""

SMALL_BYTES = 10 * 2**20
"""Members up to this size (10 MiB) may shrink as they like: many zeros in a short file are no bomb."""

LONGEST_NAME = 4096
CHUNK_BYTES = 2**20

BAG_INFO = "bag-info.txt"
CAMPAIGN_LABEL = "Campaign-Folder"
"""Label of ``bag-info.txt`` that says where in a sealed archive the campaign folder lies."""

_EPOCH = (1980, 1, 1, 0, 0, 0)
_COMMENT = b"SHA-512 of every byte before it: "
_DIGEST_LENGTH = 128
_READ_BY_US = (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED)
_ENCRYPTED = 0x1
_SQUEEZED_ALREADY = (".zip", ".whl", ".png", ".jpg", ".jpeg", ".gz", ".xz", ".webp")


def sha256_of(data: bytes) -> str:
    """Return the SHA-256 of *data* in lower-case hexadecimal (FIPS 180-4)."""
    return hashlib.sha256(data).hexdigest()


def sha512_of(content: Content) -> str:
    """Return the SHA-512 of bytes or of a file, in lower-case hexadecimal (FIPS 180-4)."""
    digest = hashlib.sha512()
    for chunk in chunks_of(content):
        digest.update(chunk)
    return digest.hexdigest()


def size_of(content: Content) -> int:
    """Return the number of bytes of *content*."""
    return len(content) if isinstance(content, bytes) else content.stat().st_size


def chunks_of(content: Content) -> Iterator[bytes]:
    """Return the bytes of *content*, a megabyte at a time."""
    if isinstance(content, bytes):
        yield content
        return
    with content.open("rb") as file:
        while chunk := file.read(CHUNK_BYTES):
            yield chunk


def write_archive(files: Mapping[str, Content], into: Path) -> None:
    """Write *files* as one zip file, whole or not at all.

    Parameters
    ----------
    files
        Contents by name with forward slashes; written in the order of their names.
    into
        The zip file; one that is there is replaced in one step.

    Raises
    ------
    CampaignStops
        Where a name could not be unpacked everywhere; nothing is written.
    """
    check_names(files)
    aside = into.with_name(f".{into.name}.new")
    try:
        with aside.open("w+b") as stream:
            _write_all(files, stream)
        os.replace(aside, into)
    finally:
        aside.unlink(missing_ok=True)


def archive_bytes(files: Mapping[str, Content]) -> bytes:
    """Return the bytes of the zip file that :func:`write_archive` writes.

    Raises
    ------
    CampaignStops
        As there.
    """
    check_names(files)
    stream = io.BytesIO()
    _write_all(files, stream)
    return stream.getvalue()


def check_names(names: Iterable[str]) -> None:
    """Stop unless files of all *names* can be unpacked wherever the archive is taken.

    Raises
    ------
    CampaignStops
        With every name that cannot.
    """
    faults = [_not_packed(name, wrong) for name in sorted(names) if (wrong := _wrong_name(name)) is not None]
    if faults:
        raise CampaignStops(faults)


def _not_packed(name: str, wrong: str) -> Notice:
    what = f"{_spelled(name)} {wrong}"
    remedy = "rename the file: letters, digits, spaces, hyphens and full stops go everywhere"
    return Notice("name-not-portable", "stops", name, None, None, what, "nothing is sealed", remedy)


def names_not_for_windows(names: Iterable[str]) -> list[Notice]:
    """Return a notice for each of *names* that Windows cannot unpack as it is; elsewhere it can be.

    Those are names with one of ``: * ? " < > |``, with a part that ends in a full stop or a space, or that is
    kept for a device (``CON``, ``NUL``, ``COM1`` and the like, whatever the ending), and names that differ
    from another in capitals alone (learn.microsoft.com, 'Naming Files, Paths, and Namespaces'; from memory).
    """
    listed = sorted(names)
    alike = Counter(name.casefold() for name in listed)
    wrong = ((name, _wrong_on_windows(name, alike[name.casefold()] > 1)) for name in listed)
    return [_hard_to_unpack(name, why) for name, why in wrong if why]


def _wrong_on_windows(name: str, is_doubled: bool) -> str:
    parts = name.split("/")
    if bad := sorted(set(name) & set(':*?"<>|')):
        return f"holds {' '.join(bad)}"
    if any(part.endswith((".", " ")) for part in parts):
        return "ends in a full stop or a space, or one of its folders does"
    if any(_DEVICES.fullmatch(part.split(".")[0].rstrip()) for part in parts):
        return "is kept for a device"
    return "differs from another name in capitals alone" if is_doubled else ""


_DEVICES = re.compile(r"(?i)con|prn|aux|nul|(?:com|lpt)[1-9¹²³]")


def _hard_to_unpack(name: str, why: str) -> Notice:
    what = f"the name {_spelled(name)} {why}: Windows cannot unpack the file under it"
    remedy = "rename the file where it lies and seal again, or unpack the archive on another system"
    return Notice("name-not-for-windows", "noted", name, None, None, what, "it is sealed as it is", remedy)


def _write_all(files: Mapping[str, Content], stream: IO[bytes]) -> None:
    with zipfile.ZipFile(stream, "w") as archive:
        archive.comment = _COMMENT + b"0" * _DIGEST_LENGTH
        for name in sorted(files):
            _write_member(archive, name, files[name])
    digest = _digest_before(stream)
    stream.seek(-_DIGEST_LENGTH, os.SEEK_END)
    stream.write(digest.encode("ascii"))


def _write_member(archive: zipfile.ZipFile, name: str, content: Content) -> None:
    info = zipfile.ZipInfo(name, _EPOCH)
    info.create_system = 3
    info.external_attr = (stat.S_IFREG | 0o644) << 16
    info.file_size = size_of(content)
    info.compress_type = zipfile.ZIP_DEFLATED if _is_deflated(name, content) else zipfile.ZIP_STORED
    with archive.open(info, "w") as member:
        for chunk in chunks_of(content):
            member.write(chunk)


def _is_deflated(name: str, content: Content) -> bool:
    """Whether a member is deflated: not what is compressed already, nor what would pass for a bomb."""
    if PurePosixPath(name).suffix.lower() in _SQUEEZED_ALREADY:
        return False
    size = size_of(content)
    if size <= SMALL_BYTES:
        return size > 0
    squeeze = zlib.compressobj(zlib.Z_DEFAULT_COMPRESSION, zlib.DEFLATED, -15)
    squeezed = sum(len(squeeze.compress(chunk)) for chunk in chunks_of(content)) + len(squeeze.flush())
    return size <= MOST_TIMES_SMALLER * squeezed


def _digest_before(stream: IO[bytes]) -> str:
    """SHA-512 of a zip file without the hash at its end."""
    digest, left = hashlib.sha512(), stream.seek(0, os.SEEK_END) - _DIGEST_LENGTH
    stream.seek(0)
    while left > 0 and (chunk := stream.read(min(CHUNK_BYTES, left))):
        digest.update(chunk)
        left -= len(chunk)
    return digest.hexdigest()


def hash_in_comment_holds(file: Path) -> bool | None:
    """Return whether a zip file is, byte by byte, the one that was written.

    Returns
    -------
    bool or None
        ``None`` where its comment carries no hash: another program wrote the zip file.
    """
    with file.open("rb") as archive:
        archive.seek(max(file.stat().st_size - _DIGEST_LENGTH - len(_COMMENT), 0))
        comment = archive.read()
        if not comment.startswith(_COMMENT):
            return None
        return comment[len(_COMMENT) :] == _digest_before(archive).encode("ascii")


@dataclass(frozen=True)
class Unpacked:
    """What came out of an archive.

    Attributes
    ----------
    folder
        The one folder at the top of the archive, or, where there are several things, the whole.
    damaged
        One notice for each member whose bytes could not be had whole.
    """

    folder: Path
    damaged: tuple[Notice, ...]


def unpack_archive(file: Path, into: Path) -> Path:
    """Unpack a zip file into an empty folder, refusing whatever plain files in one folder are not.

    Parameters
    ----------
    file
        The zip file.
    into
        A folder that is empty or does not exist yet.

    Returns
    -------
    Path
        The one folder at the top of the archive, or *into* where there are several things.

    Raises
    ------
    CampaignStops
        Where *file* cannot be read as a zip file; names a place outside (``..``, absolute, drive letter,
        backslash); holds a link, a device, one name twice, an encrypted member; would unpack to more than
        ``MOST_BYTES`` or ``MOST_MEMBERS``; where a member beyond ``SMALL_BYTES`` is more than
        ``MOST_TIMES_SMALLER`` times larger than in the archive; or is damaged. All faults are named at once,
        and nothing of what was unpacked is left.
    """
    unpacked = unpack_what_is_whole(file, into)
    if unpacked.damaged:
        _remove_tree(into)
        raise CampaignStops(unpacked.damaged)
    return unpacked.folder


def unpack_what_is_whole(file: Path, into: Path) -> Unpacked:
    """Unpack as :func:`unpack_archive` does, but go on where the bytes of a member are damaged.

    Raises
    ------
    CampaignStops
        As there, except for damaged members.
    """
    if into.is_dir() and any(into.iterdir()):
        what = f"the folder '{into.name}' is not empty"
        raise CampaignStops([_unreadable(file, what, "unpack into an empty folder")])
    try:
        with zipfile.ZipFile(file) as archive:
            members = archive.infolist()
            if faults := [*_wrong_members(file, members)]:
                raise CampaignStops(faults)
            into.mkdir(parents=True, exist_ok=True)
            damaged = [fault for info in members for fault in _unpack_member(archive, info, into)]
    except (zipfile.BadZipFile, zipfile.LargeZipFile, NotImplementedError, EOFError, ValueError) as fault:
        what = f"'{file.name}' cannot be read as a zip file ({fault})"
        raise CampaignStops([_unreadable(file, what)]) from fault
    except OSError as fault:
        what = f"'{file.name}' cannot be unpacked ({fault.strerror or fault})"
        raise CampaignStops([_unreadable(file, what)]) from fault
    tops = {info.filename.partition("/")[0] for info in members}
    loose = any("/" not in info.filename for info in members)
    return Unpacked(into / tops.pop() if len(tops) == 1 and not loose else into, tuple(damaged))


def _unpack_member(archive: zipfile.ZipFile, info: zipfile.ZipInfo, into: Path) -> Iterator[Notice]:
    target = into / info.filename
    if _is_folder(info):
        target.mkdir(parents=True, exist_ok=True)
        return
    target.parent.mkdir(parents=True, exist_ok=True)
    with target.open("xb") as out:
        try:
            with archive.open(info) as member:
                while chunk := member.read(CHUNK_BYTES):
                    out.write(chunk)
        except (zipfile.BadZipFile, zlib.error, EOFError, NotImplementedError, RuntimeError) as fault:
            what = f"the bytes of '{info.filename}' are damaged in the archive ({fault})"
            yield _fault("archive-damaged", info.filename, what, "fetch the archive again from its source")


def _wrong_members(file: Path, members: list[zipfile.ZipInfo]) -> Iterator[Notice]:
    """Everything that speaks against unpacking some members, before any of it is."""
    for info in members:
        for wrong in _wrongs_of(info):
            yield _refused(info.orig_filename, wrong)
    yield from _clashes([info.filename for info in members if not _is_folder(info)])
    total = sum(info.file_size for info in members)
    if total > MOST_BYTES:
        what = f"'{file.name}' would unpack to {total / 2**30:.1f} GiB, more than {MOST_BYTES // 2**30} GiB"
        yield _fault("archive-too-large", None, what, "ask where the archive comes from")
    if len(members) > MOST_MEMBERS:
        what = f"'{file.name}' holds {len(members)} files, more than {MOST_MEMBERS}"
        yield _fault("archive-too-large", None, what, "ask where the archive comes from")


def _wrongs_of(info: zipfile.ZipInfo) -> Iterator[str]:
    name = info.orig_filename
    if (wrong := _wrong_name(name.removesuffix("/") if _is_folder(info) else name)) is not None:
        yield wrong
    kind = stat.S_IFMT(info.external_attr >> 16)
    if kind == stat.S_IFLNK:
        yield "is a link"
    elif kind not in (0, stat.S_IFREG, stat.S_IFDIR):
        yield "is no ordinary file"
    if info.flag_bits & _ENCRYPTED:
        yield "is encrypted"
    if info.compress_type not in _READ_BY_US:
        yield f"is compressed by method {info.compress_type}; only stored and deflated members are read"
    if info.file_size > max(SMALL_BYTES, MOST_TIMES_SMALLER * info.compress_size):
        yield (
            f"claims {info.file_size} bytes, more than {MOST_TIMES_SMALLER} times"
            f" its {info.compress_size} bytes in the archive"
        )


def _is_folder(info: zipfile.ZipInfo) -> bool:
    """Whether a member is a folder; unlike the library's own question this one takes an empty name."""
    return info.filename.endswith("/")


def _wrong_name(name: str) -> str | None:
    """Say why a file of this name is not unpacked, or return ``None``."""
    if "\\" in name:
        return "has a backslash in its name"
    if name.startswith("/"):
        return "has an absolute path"
    if re.match(r"[A-Za-z]:", name):
        return "begins with a drive letter"
    if any(part in ("", ".", "..") for part in name.split("/")):
        return "climbs out of the folder, or has an empty part in its path"
    if any(unicodedata.category(character) in ("Cc", "Cs") for character in name):
        return "has control characters in its name"
    return "has a name that is too long" if len(name.encode()) > LONGEST_NAME else None


def _clashes(names: list[str]) -> Iterator[Notice]:
    """Names that stand twice, and names that are a file and a folder at once."""
    folders = {str(folder) for name in names for folder in PurePosixPath(name).parents}
    for name, times in sorted(Counter(names).items()):
        if times > 1:
            yield _refused(name, f"stands {times} times in the archive")
        if name in folders:
            yield _refused(name, "is a file and a folder at once")


def campaign_in(folder: Path) -> Path:
    """Return the campaign folder in what was unpacked: *folder* itself, or where a sealed archive says.

    Raises
    ------
    CampaignStops
        Where ``bag-info.txt`` names a place that is not inside *folder*.
    """
    for line in _lines_of(folder / BAG_INFO):
        label, _, value = line.partition(":")
        if label == CAMPAIGN_LABEL:
            if _wrong_name(value.strip()) is not None:
                raise CampaignStops([_refused(value.strip(), "is no place inside the archive")])
            return folder / value.strip()
    return folder


def _lines_of(file: Path) -> list[str]:
    return file.read_text("utf-8", errors="replace").splitlines() if file.is_file() else []


def _remove_tree(folder: Path) -> None:
    """Remove what was just unpacked; the folder itself was empty before and is empty again."""
    for place, folders, files in os.walk(folder, topdown=False):
        for name in files:
            (Path(place) / name).unlink()
        for name in folders:
            (Path(place) / name).rmdir()


def _refused(name: str, wrong: str) -> Notice:
    remedy = "ask where the archive comes from; sealed archives hold plain files with plain names only"
    return _fault("archive-member", name, f"{_spelled(name)} {wrong}", remedy)


def _spelled(name: str) -> str:
    return name.encode("unicode_escape").decode() if not name.isprintable() else f"'{name}'"


def _unreadable(file: Path, what: str, remedy: str = "fetch the archive again from its source") -> Notice:
    return _fault("archive-unreadable", file.name, what, remedy)


def _fault(code: str, file: str | None, what: str, remedy: str) -> Notice:
    return Notice(code, "stops", file, None, None, what, "nothing is unpacked", remedy)
