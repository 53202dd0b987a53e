"""Texts of the lab as they are shown: what cannot be seen, or turns text around, is spelled out.

Titles, reasons and notes may hold anything. Controls and marks that reverse the writing direction could make
a page read as something else (Unicode Technical Report 36, section 2.5), and control characters have no
place in HTML and SVG. Joiners within words and emoji are left alone: scripts need them.
"""

from __future__ import annotations

import re

from markupsafe import Markup

_UNSEEN = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x84\x86-\x9f\u061c\u200b\u200e\u200f\u2028-\u202e\u2060-\u206f\ufeff"
    "\ud800-\udfff\ue000-\uf8ff\ufff9-\ufffb\ufffe\uffff\U000e0000-\U000e007f]"
)
_UNESCAPED_IN_JSON = re.compile(
    "[\x7f-\x84\x86-\x9f\u061c\u200b\u200e\u200f\u2028-\u202e\u2060-\u206f\ufeff\ufff9-\ufffb\U000e0000-\U000e007f]"
)
_UNSEEN_IN_JSON = re.compile(
    r"(?<!\\)((?:\\\\)*)\\(?=u00(?:0[0-8bce-f]|1[0-9a-f]))|" + _UNESCAPED_IN_JSON.pattern
)


def legible(text: str) -> str:
    """Return *text* with what cannot be seen spelled out by its escape."""
    if text.isascii() and text.isprintable():
        return text
    return _UNSEEN.sub(_spelled, text)


def legible_value(value: object) -> object:
    """Return what a template prints: texts of the lab legible, markup of our own as it is."""
    return legible(value) if isinstance(value, str) and not isinstance(value, Markup) else value


def legible_json(content: bytes) -> bytes:
    """Return JSON whose texts are legible; places of gaps (private characters) stay."""
    text = content.decode("utf-8")
    if "\\u00" not in text and not _UNESCAPED_IN_JSON.search(text):
        return content
    return _UNSEEN_IN_JSON.sub(_spelled_in_json, text).encode("utf-8")


def _spelled(found: re.Match[str]) -> str:
    number = ord(found[0])
    return f"\\u{number:04x}" if number < 0x10000 else f"\\U{number:08x}"


def _spelled_in_json(found: re.Match[str]) -> str:
    if found[1] is not None:
        return f"{found[1]}\\\\"
    return "\\" + _spelled(found)
