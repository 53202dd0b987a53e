"""Notes: Markdown of the lab becomes pages, and nothing of it runs, climbs or reaches out."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from campaign.pages.notes import Notes, is_picture, make_notes, read_note_files
from campaign.pages.page import SiteFrame
from campaign.pages.render import render_site

PNG = b"\x89PNG\r\n\x1a\n" + b"\0" * 20
SVG = b'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 9 9"><path d="M0 0L9 9" stroke="#000"/></svg>'


def page_of(notes: Notes, index: int = 0) -> str:
    files = render_site(SiteFrame("t", ()), notes.pages)
    return files[notes.pages[index].file].decode("utf-8")


def body_of(text: str, **files: bytes) -> str:
    notes = make_notes({"a.md": text.encode(), **files})
    page = page_of(notes)
    return page[page.index('<article class="note-body">') : page.index("</article>")]


def test_a_note_becomes_a_page_titled_by_its_heading() -> None:
    notes = make_notes({"The stand.md": b"# The *stand*\n\nA | B\n--|--\n1 | 2\n"})
    (page,) = notes.pages
    assert page.title == "The stand"
    assert re.fullmatch(r"note-the_stand_[a-z]{6}", page.slug)
    assert "<td>1</td>" in page_of(notes)
    assert page_of(notes).count("<h1>") == 1


def test_notes_are_neighbours_in_order_of_name() -> None:
    notes = make_notes({"b.md": b"# B", "a.md": b"# A", "c.md": b"no heading"})
    assert [page.title for page in notes.pages] == ["A", "B", "c"]
    assert notes.pages[0].previous is None
    assert notes.pages[1].previous == ("A", notes.pages[0].file)
    assert notes.pages[1].following == ("c", notes.pages[2].file)


ATTACKS = [
    "<script>alert(1)</script>",
    "<img src=x onerror=alert(1)>",
    "[x](javascript:alert(1))",
    "[x](JaVaScRiPt:alert(1))",
    "[x](data:text/html,<script>alert(1)</script>)",
    "[x](vbscript:x)",
    "[x](file:///etc/passwd)",
    "![x](https://example.invalid/track.png)",
    "![x](//example.invalid/track.png)",
    "![x](../../../etc/passwd.png)",
    "<iframe src=https://example.invalid></iframe>",
    "<svg><script>alert(1)</script></svg>",
    "<style>body{display:none}</style>",
    "<div style='position:fixed'>x</div>",
    "<form action=https://example.invalid><input></form>",
    "<base href=https://example.invalid>",
    "<meta http-equiv=refresh content=0>",
    "<a href='x' onclick='alert(1)'>x</a>",
    "<math><mtext><table><mglyph><style><img src=x onerror=alert(1)>",
    "<p id=content>x</p>",
    "{{ 7*7 }} {% include 'frame.html' %}",
    "<object data=x></object><embed src=x>",
    "<link rel=stylesheet href=https://example.invalid/x.css>",
]


@pytest.mark.parametrize("attack", ATTACKS)
def test_nothing_of_a_note_runs_or_reaches_out(attack: str) -> None:
    body = body_of(f"# Note\n\nbefore\n\n{attack}")
    assert not re.search(
        r"<(script|iframe|style|form|input|base|meta|object|embed|link|svg|math)\b", body, re.I
    )
    assert not re.search(r"<[^>]*\s(on\w+|style)\s*=", body, re.I)
    assert not re.search(r"(href|src)\s*=\s*[\"']?\s*(javascript|data|vbscript|file|//)", body, re.I)
    assert not re.search(r"src=[\"']https?:", body, re.I)
    assert 'id="content"' not in body
    assert "49" not in body.replace("7*7", "")
    assert "before" in body


def test_links_lead_outside_to_other_notes_or_nowhere() -> None:
    body = body_of(
        "[o](https://example.org/x) [b](b.md#part) [n](../campaign.toml) [h](#part)", **{"b.md": b"# B"}
    )
    assert 'href="https://example.org/x"' in body
    assert 'rel="noopener noreferrer"' in body
    assert re.search(r'href="note-b_[a-z]{6}\.html"', body)
    assert 'href="#note-part"' in body
    assert "campaign.toml" not in body


def test_links_outside_are_listed_for_print() -> None:
    assert "<li>https://example.org/x</li>" in page_of(make_notes({"a.md": b"[o](https://example.org/x)"}))


def test_ids_of_a_note_cannot_take_the_place_of_the_pages_own() -> None:
    body = body_of("Text[^1]\n\n[^1]: Foot.")
    ids = re.findall(r'\bid="([^"]*)"', body)
    assert ids
    assert all(name.startswith("note-") for name in ids)
    assert all(f'href="#{name}"' in body for name in ids)


def test_pictures_come_from_the_notes_own_files() -> None:
    notes = make_notes(
        {"sub/a.md": b"![p](../p.png) ![q](q%20r.svg)", "p.png": PNG, "sub/q r.svg": SVG, "unused.png": PNG}
    )
    assert sorted(notes.files or {}) == sorted(re.findall(r'src="(notes/[^"]+)"', page_of(notes)))
    assert set((notes.files or {}).values()) == {PNG, SVG}
    assert notes.notices == ()


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("p.png", b"<html><script>1</script>"),
        ("p.svg", SVG.replace(b"<path", b"<script>1</script><path")),
        ("p.svg", SVG.replace(b"<path", b'<path onload="alert(1)"')),
        ("p.svg", SVG.replace(b"<path", b'<image href="https://example.invalid/x.png"/><path')),
        ("p.svg", SVG.replace(b"<path", b"<foreignObject/><path")),
        ("p.svg", SVG.replace(b'stroke="#000"', b'fill="url(https://example.invalid/x)"')),
        ("p.svg", b'<!DOCTYPE svg [<!ENTITY a "aaaa">]>' + SVG),
        ("p.svg", b"not xml"),
        ("missing.gif", None),
    ],
)
def test_a_picture_that_cannot_be_shown_is_a_notice(name: str, content: bytes | None) -> None:
    files = {"a.md": f"![p]({name}) after".encode()} | ({name: content} if content is not None else {})
    notes = make_notes(files)
    assert notes.files == {}
    (notice,) = notes.notices
    assert (notice.file, notice.weight) == ("notes/a.md", "noted")
    assert "src=" not in re.sub(r"<script[^>]*>", "", page_of(notes))


def test_plain_pictures_are_recognised_by_content() -> None:
    assert is_picture("a.PNG", PNG)
    assert is_picture("a.svg", b"<!-- drawn by hand -->" + SVG)
    assert not is_picture("a.jpg", PNG)
    assert not is_picture("a.exe", PNG)


def test_files_are_read_below_notes_only(tmp_path: Path) -> None:
    (tmp_path / "secret.md").write_text("secret", encoding="utf-8")
    assert read_note_files(tmp_path) == {}
    (tmp_path / "notes" / "sub").mkdir(parents=True)
    (tmp_path / "notes" / "a.md").write_text("# A", encoding="utf-8")
    (tmp_path / "notes" / "sub" / "p.png").write_bytes(PNG)
    (tmp_path / "notes" / "program.exe").write_bytes(b"x")
    (tmp_path / "notes" / "link.md").symlink_to(tmp_path / "secret.md")
    (tmp_path / "notes" / "out").symlink_to(tmp_path, target_is_directory=True)
    assert sorted(read_note_files(tmp_path)) == ["a.md", "sub/p.png"]
