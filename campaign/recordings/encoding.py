"""From a file's bytes to text: encoding, byte order mark, line ends, with a remark on every change."""

from __future__ import annotations

import re
from dataclasses import dataclass

from campaign.notices import Notice
from campaign.recordings.remarks import noted, set_aside, shown

_MAGIC: tuple[tuple[bytes, str], ...] = (
    (b"\x1f\x8b", "a gzip archive"),
    (b"PK\x03\x04", "a zip archive or a spreadsheet workbook"),
    (b"BZh", "a bzip2 archive"),
    (b"\xfd7zXZ\x00", "an xz archive"),
    (b"7z\xbc\xaf\x27\x1c", "a 7-Zip archive"),
    (b"\x28\xb5\x2f\xfd", "a Zstandard archive"),
    (b"\xd0\xcf\x11\xe0", "an old spreadsheet or office file"),
    (b"%PDF", "a PDF document"),
    (b"\x89PNG", "a PNG picture"),
    (b"\xff\xd8\xff", "a JPEG picture"),
    (b"\x89HDF", "an HDF5 file"),
    (b"SQLite format 3", "an SQLite database"),
    (b"PAR1", "a Parquet table"),
    (b"TDSm", "a TDMS recording"),
    (b"MATLAB 5.0", "a MATLAB data file"),
)
_CONTROL = bytes(b for b in range(32) if b not in b"\t\n\r\x00\x1a\x0c")


@dataclass(frozen=True)
class PlainText:
    """A file's bytes as UTF-8 with line feeds, and the remarks that getting there took.

    Attributes
    ----------
    data
        UTF-8, no byte order mark, lines ended by a line feed.
    notices
        Without a file name; one of weight ``"set aside"`` means that the file cannot be read as text.
    """

    data: bytes
    notices: tuple[Notice, ...] = ()

    @property
    def readable(self) -> bool:
        """Whether there is text to go on with."""
        return all(notice.weight == "noted" for notice in self.notices)


def plain_text(data: bytes, encoding: str | None = None) -> PlainText:
    """Return the bytes of a file as UTF-8 with line feeds, with a remark on all that had to be changed.

    Parameters
    ----------
    data
        The file's bytes.
    encoding
        Pinned by the description; ``None``: found out (byte order mark, UTF-8, GBK, else CP1252).
    """
    if not data:
        return PlainText(
            b"", (set_aside("empty", 1, None, "the file has no bytes", "export the recording again"),)
        )
    binary = _binary_kind(data)
    if binary is not None:
        remedy = "unpack or export it as text; if it is no recording, leave it out of [recordings] files"
        return PlainText(b"", (set_aside("binary", 1, 1, f"the file is {binary}", remedy),))
    decoded = _decoded(data, encoding)
    return _with_line_feeds(decoded) if decoded.readable else decoded


def _binary_kind(data: bytes) -> str | None:
    for magic, words in _MAGIC:
        if data.startswith(magic):
            return words
    if data[:2] in (b"\xff\xfe", b"\xfe\xff") or _looks_like_utf16(data):
        return None
    head = data[:4096]
    control = len(head) - len(head.translate(None, _CONTROL))
    first_line = head.partition(b"\n")[0]
    if control > max(8, len(head) // 50) or (b"\x00" in first_line and not first_line.strip(b"\x00 \r")):
        return "binary, not text"
    return None


def _looks_like_utf16(data: bytes) -> bool:
    """Whether every second byte at the start is NUL: UTF-16 of plain letters without a byte order mark."""
    head = data[:512]
    return (
        len(head) >= 4
        and min(head[::2].count(0), head[1::2].count(0)) == 0
        and head.count(0) >= len(head) * 0.4
    )


def _decoded(data: bytes, encoding: str | None) -> PlainText:
    if encoding is not None:
        return _decoded_as_pinned(data, encoding)
    if data.startswith(b"\xef\xbb\xbf"):
        note = noted("bom", 1, None, "the file starts with a UTF-8 byte order mark", "the mark is taken off")
        rest = _decoded(data[3:], None)
        return PlainText(rest.data, (note, *rest.notices))
    if data[:2] in (b"\xff\xfe", b"\xfe\xff") or _looks_like_utf16(data):
        return _decoded_utf16(data)
    if data.isascii():
        return PlainText(data)
    try:
        data.decode("utf-8")
    except UnicodeDecodeError as error:
        return _decoded_otherwise(data, error.start)
    return PlainText(data)


def _decoded_as_pinned(data: bytes, encoding: str) -> PlainText:
    try:
        text = data.removeprefix(b"\xef\xbb\xbf").decode(encoding)
    except LookupError:
        what = f"the description names the encoding '{encoding}', which is not known"
        return PlainText(b"", (set_aside("encoding", None, None, what, 'such as encoding = "utf-16"'),))
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        what = f"the file is not {encoding}, which the description pins"
        return PlainText(
            b"", (set_aside("encoding", line, None, what, "leave encoding out of [recordings]"),)
        )
    return PlainText(text.removeprefix("\ufeff").encode())


def _decoded_utf16(data: bytes) -> PlainText:
    marked = data[:2] in (b"\xff\xfe", b"\xfe\xff")
    codec = "utf-16" if marked else ("utf-16-le" if data[1:2] == b"\x00" else "utf-16-be")
    try:
        text = data.decode(codec)
    except UnicodeDecodeError:
        text = data.decode(codec, errors="replace")
    what = "the file is UTF-16" + ("" if marked else " without a byte order mark")
    return PlainText(text.encode(), (noted("utf-16", 1, None, what, "decoded"),))


def _decoded_otherwise(data: bytes, start: int) -> PlainText:
    codec, words = ("gbk", "GBK") if _looks_like_gbk(data) else ("cp1252", "Windows-1252")
    text = data.decode(codec, errors="replace")
    line = data.count(b"\n", 0, start) + 1
    column = len(data[data.rfind(b"\n", 0, start) + 1 : start].decode("utf-8", errors="replace")) + 1
    what = (
        f"the file is not UTF-8; its first other character is read as '{_character_at(text, line, column)}'"
    )
    done = f"decoded as {words}"
    note = noted("encoding", line, column, what, done, "if that is wrong, pin encoding in [recordings]")
    return PlainText(text.encode(), (note,))


def _character_at(text: str, line: int, column: int) -> str:
    wanted = text.split("\n", line)[line - 1]
    return shown(wanted[column - 1 : column])


def _looks_like_gbk(data: bytes) -> bool:
    """Whether all bytes above 127 pair into GB 2312 characters, most of them of its common part.

    Accented letters of European texts stand alone as a rule, and their pairs fall into the rare second level.
    """
    runs = re.findall(rb"[\x80-\xff]+", data[: 1 << 20])
    if any(len(run) % 2 for run in runs):
        return False
    pairs = [run[i : i + 2] for run in runs for i in range(0, len(run), 2)]
    if not all(0xA1 <= pair[0] <= 0xF7 and pair[1] >= 0xA1 for pair in pairs):
        return False
    common = sum(0xB0 <= pair[0] <= 0xD7 or pair[0] <= 0xA9 for pair in pairs)
    return bool(common * 2 > len(pairs))


def _with_line_feeds(text: PlainText) -> PlainText:
    """Return the text with every line end a line feed, and a remark where the file used another."""
    data = text.data
    if b"\r" not in data:
        return text
    both, feeds = data.count(b"\r\n"), data.count(b"\n")
    lone = data.count(b"\r") - both
    plain = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    if both == feeds and lone == 0:
        note = noted("crlf", None, None, "lines end in carriage return and line feed", "read as line ends")
    elif feeds == 0:
        note = noted("cr", None, None, "lines end in carriage returns", "read as line ends")
    else:
        line = _first_changed_line(data)
        note = noted(
            "mixed-eol", line, None, "the line end changes within the file", "every kind ends a line"
        )
    return PlainText(plain, (*text.notices, note))


def _first_changed_line(data: bytes) -> int:
    ends = re.finditer(rb"\r\n|\r|\n", data)
    first = next(ends)[0]
    return next((number for number, end in enumerate(ends, start=2) if end[0] != first), 1)
