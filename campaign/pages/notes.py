"""Notes of the campaign (``notes/*.md``) as pages: Markdown made HTML, cleaned by an allow-list.

A note may hold text, tables, links and pictures of its own folder. Whatever else a note holds is taken out; a
picture that is missing, of another kind or too large is named in a notice. Ids get a prefix, so that no note
can take the place of the page's own.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path, PurePosixPath
from urllib.parse import unquote
from xml.etree import ElementTree

import nh3
from markdown import Markdown
from markupsafe import Markup

from campaign.notices import Notice
from campaign.pages import slugs
from campaign.pages.legible import legible
from campaign.pages.page import Page

FOLDER = "notes"
LARGEST_FILE_BYTES = 5_000_000
PICTURES = (".png", ".jpg", ".jpeg", ".gif", ".webp", ".svg")


def _words(text: str) -> frozenset[str]:
    return frozenset(text.split())


_TAGS = _words(
    """
    a abbr b blockquote br caption code dd del div dl dt em figcaption figure h1 h2 h3 h4 h5 h6 hr i img
    ins kbd li ol p pre s samp section small span strong sub sup table tbody td tfoot th thead tr ul var
    """
)
_ATTRIBUTES = {
    "a": {"href", "title", "id"},
    "abbr": {"title"},
    "img": {"src", "alt", "title"},
    "li": {"id"},
    "ol": {"start"},
    "sup": {"id"},
    "td": {"colspan", "rowspan"},
    "th": {"colspan", "rowspan", "scope"},
}
_ID_PREFIX = "note-"
_PICTURE_STARTS: dict[str, tuple[bytes, ...]] = {
    ".png": (b"\x89PNG\r\n\x1a\n",),
    ".jpg": (b"\xff\xd8\xff",),
    ".jpeg": (b"\xff\xd8\xff",),
    ".gif": (b"GIF87a", b"GIF89a"),
    ".webp": (b"RIFF",),
}
_SVG = "{http://www.w3.org/2000/svg}"
_SVG_ELEMENTS = _words(
    """
    svg g path rect circle ellipse line polyline polygon text tspan title desc defs linearGradient
    radialGradient stop clipPath
    """
)
_SVG_ATTRIBUTES = _words(
    """
    aria-label class clip-path color cx cy d dominant-baseline dx dy fill fill-opacity fill-rule
    font-family font-size font-style font-weight fx fy gradientTransform gradientUnits height id
    letter-spacing offset opacity points preserveAspectRatio r role rotate rx ry stop-color
    stop-opacity stroke stroke-dasharray stroke-linecap stroke-linejoin stroke-opacity stroke-width
    text-anchor textLength transform version viewBox width x x1 x2 y y1 y2
    """
)


@dataclass(frozen=True)
class Notes:
    """The notes of a campaign.

    Attributes
    ----------
    pages
        One page a note, sorted by name.
    files
        Pictures by their address in the site.
    notices
        What could not be shown.
    """

    pages: tuple[Page, ...] = ()
    files: Mapping[str, bytes] | None = None
    notices: tuple[Notice, ...] = ()


def read_note_files(campaign: Path) -> dict[str, bytes]:
    """Return the Markdown files and pictures of the campaign's ``notes`` by path from there, sorted.

    Links to other places and files over 5 MB are left alone.
    """
    folder = campaign / FOLDER
    if folder.is_symlink() or not folder.is_dir():
        return {}
    found = {}
    for path in sorted(folder.rglob("*")):
        inside = not any(
            part.is_symlink() for part in (path, *path.parents) if folder in (part, *part.parents)
        )
        wanted = path.suffix.lower() in (".md", *PICTURES)
        if wanted and inside and path.is_file() and path.stat().st_size <= LARGEST_FILE_BYTES:
            found[path.relative_to(folder).as_posix()] = path.read_bytes()
    return found


def make_notes(files: Mapping[str, bytes]) -> Notes:
    """Return pages, pictures and notices of the notes in *files* (bytes by path from ``notes``)."""
    names = sorted(name for name in files if name.lower().endswith(".md"))
    used: dict[str, bytes] = {}
    notices: list[Notice] = []
    pages = []
    for name in names:
        note = _Note(name, files, used, notices)
        pages.append(note.page())
    return Notes(_as_neighbours(pages), dict(sorted(used.items())), tuple(notices))


def picture_address(name: str) -> str:
    """Return the address in the site of a note's picture."""
    return f"{FOLDER}/{slugs.slug(name)}{PurePosixPath(name).suffix.lower()}"


def is_picture(name: str, content: bytes) -> bool:
    """Whether *content* is what its ending says: by its first bytes; an SVG by all that it holds."""
    ending = PurePosixPath(name).suffix.lower()
    if ending == ".svg":
        return _is_plain_svg(content)
    return content.startswith(_PICTURE_STARTS.get(ending, (b"\0 never",)))


def _is_plain_svg(content: bytes) -> bool:
    """Whether an SVG holds shapes and text alone: no script, no style, no link, no entity."""
    if b"<!" in content.replace(b"<!--", b"") or b"<?xml-stylesheet" in content:
        return False
    try:
        root = ElementTree.fromstring(content)
    except ElementTree.ParseError:
        return False
    elements = list(root.iter())
    known = all(isinstance(e.tag, str) and e.tag.removeprefix(_SVG) in _SVG_ELEMENTS for e in elements)
    attributes = [(key, value) for e in elements for key, value in e.attrib.items()]
    return root.tag == f"{_SVG}svg" and known and all(_is_plain_attribute(k, v) for k, v in attributes)


def _is_plain_attribute(key: str, value: str) -> bool:
    inside = re.fullmatch(r"url\(#[\w-]+\)", value.strip()) is not None
    return key in _SVG_ATTRIBUTES and (inside or "url" not in value.lower())


class _Note:
    """One note as it is turned into a page; collects pictures and notices of all notes as it goes."""

    def __init__(
        self, name: str, files: Mapping[str, bytes], used: dict[str, bytes], notices: list[Notice]
    ) -> None:
        self.name, self.files, self.used, self.notices = name, files, used, notices
        self.links: list[str] = []

    def page(self) -> Page:
        text = self.files[self.name].decode("utf-8-sig", errors="replace").replace("\r\n", "\n")
        text = legible(text)
        title, body = _title_and_body(text, PurePosixPath(self.name).stem)
        made = Markdown(extensions=["tables", "fenced_code", "sane_lists", "footnotes"], output_format="html")
        cleaned = nh3.clean(
            made.convert(body),
            tags=set(_TAGS),
            attributes=_ATTRIBUTES,
            attribute_filter=self._attribute,
            url_schemes={"http", "https", "mailto"},
            id_prefix=_ID_PREFIX,
        )
        return Page(
            slug=slugs.note_slug(self.name.removesuffix(".md")),
            number=None,
            title=title,
            template="note.html",
            context={"body": Markup(_shifted(cleaned)), "links": tuple(self.links)},
            description=f"A note of the campaign: {title}",
            above=(("Findings", "index.html"),),
        )

    def _attribute(self, _tag: str, attribute: str, value: str) -> str | None:
        if attribute == "src":
            return self._picture(value)
        return self._link(value) if attribute == "href" else value

    def _link(self, value: str) -> str | None:
        """Return where a link leads: outside as it is, to another note its page, to a footnote its new id."""
        if re.match(r"(?:https?|mailto):", value, re.IGNORECASE):
            if value not in self.links:
                self.links.append(value)
            return value
        if value.startswith("#"):
            return f"#{_ID_PREFIX}{value[1:]}"
        target = self._beside(value.partition("#")[0])
        if target in self.files and target.lower().endswith(".md"):
            return f"{slugs.note_slug(target.removesuffix('.md'))}.html"
        return None

    def _picture(self, value: str) -> str | None:
        """Return the address of a picture, ``None`` (with a notice) where it cannot be shown."""
        target = self._beside(value)
        if target not in self.files:
            self._remark(value, "is not among the notes' own files")
            return None
        if not is_picture(target, self.files[target]):
            self._remark(value, "is no picture of a kind that is shown (PNG, JPEG, GIF, WebP, plain SVG)")
            return None
        self.used[picture_address(target)] = self.files[target]
        return picture_address(target)

    def _beside(self, value: str) -> str:
        """Return the path from ``notes`` that an address in this note means, empty where it climbs out."""
        parts: list[str] = list(PurePosixPath(self.name).parent.parts)
        for part in PurePosixPath(unquote(value)).parts:
            if part == "..":
                if not parts:
                    return ""
                parts.pop()
            elif part != ".":
                parts.append(part)
        return "/".join(parts)

    def _remark(self, value: str, fault: str) -> None:
        self.notices.append(
            Notice(
                code="note-picture",
                weight="noted",
                file=f"{FOLDER}/{self.name}",
                line=None,
                column=None,
                what=f"the picture {value[:80]!r} {fault}",
                done="the note is shown without it",
                remedy="put the picture beside the note",
            )
        )


def _title_and_body(text: str, otherwise: str) -> tuple[str, str]:
    """Return the first heading as plain text, and the text without it."""
    found = re.match(r"\s*#\s+(.+?)\s*#*\s*(?:\n|\Z)", text)
    if found is None:
        return otherwise, text
    return re.sub(r"[*_`]", "", found.group(1)).strip() or otherwise, text[found.end() :]


def _shifted(cleaned: str) -> str:
    """Return the note's HTML with its first-level headings one level down: the page has its own."""
    return re.sub(r"<(/?)h1>", r"<\1h2>", cleaned)


def _as_neighbours(pages: Iterable[Page]) -> tuple[Page, ...]:
    listed = list(pages)
    links = [(page.title, page.file) for page in listed]
    before, after = [None, *links][: len(links)], [*links, None][1:]
    return tuple(
        replace(page, previous=b, following=a) for page, b, a in zip(listed, before, after, strict=True)
    )
