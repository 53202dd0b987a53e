"""The site's files: deterministic, offline, strict, and proof against what recordings may say."""

from __future__ import annotations

import html
import json
import os
import re
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import pytest

from campaign.notices import CampaignStops
from campaign.pages.assets import library_bytes
from campaign.pages.legible import legible
from campaign.pages.page import Page
from tests.pages.toy import site_of, toy_page, toy_site, toy_table

ROOT = Path(__file__).parents[2]

HOSTILE = [
    "<script>window.ran = 1</script>",
    '"><img src=x onerror="window.ran=1">',
    "' onfocus='window.ran=1' autofocus='",
    "javascript:window.ran=1",
    "</title></style></textarea><svg onload=window.ran=1>",
    "]]></svg><script>1</script>",
    "{{ 7*7 }}{% raw %}",
    "%{x}<b>x</b><a href='javascript:1'>y</a>",
    "../../../etc/passwd",
    '=HYPERLINK("http://x.invalid")',
    "\u202eevil\u2066\u200f",
    "a\u2028b\u2029c",
    "*/ } body { display: none } /*",
    "ε–Ω 袖口 \U0001f9e4",
    "a" * 300,
    "line\nbreak\ttab",
]


class Reader(HTMLParser):
    """Collects what a page is made of."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))


def tags_of(page: bytes) -> list[tuple[str, dict[str, str | None]]]:
    reader = Reader()
    reader.feed(page.decode("utf-8"))
    return reader.tags


def shape_of(page: bytes) -> list[tuple[str, list[str]]]:
    """Which elements with which attributes a page holds, in no order, but for
    places where a path may break."""
    tags = ((tag, sorted(attributes)) for tag, attributes in tags_of(page))
    return sorted((tag, attributes) for tag, attributes in tags if tag != "wbr")


def test_the_same_input_gives_the_same_bytes_in_another_process() -> None:
    """Two processes with different hash seeds write the same site."""
    script = (
        "import hashlib; from tests.pages.toy import toy_site; files = toy_site();"
        "print(hashlib.sha256(b''.join(k.encode() + v for k, v in files.items())).hexdigest())"
    )
    digests = set()
    for seed in ("1", "2"):
        environment = {**os.environ, "PYTHONHASHSEED": seed, "PYTHONPATH": str(ROOT)}
        run = subprocess.run(
            [sys.executable, "-c", script],
            cwd=ROOT,
            env=environment,
            capture_output=True,
            text=True,
            check=True,
        )
        digests.add(run.stdout.strip())
    assert len(digests) == 1


def test_the_policy_stands_in_every_page_and_nothing_is_inline() -> None:
    for address, content in toy_site().items():
        if not address.endswith(".html"):
            continue
        tags = tags_of(content)
        policies = [a["content"] for t, a in tags if a.get("http-equiv") == "Content-Security-Policy"]
        assert policies == [
            "default-src 'none'; script-src 'self'; "
            "style-src 'self' 'sha256-47DEQpj8HBSa+/TImW+5JCeuQeRkm5NMpJWZG3hSuFU='; "
            "img-src 'self' data: blob:; base-uri 'none'; form-action 'none'"
        ]
        assert not any(name == "style" or name.startswith("on") for _, a in tags for name in a)
        assert all(a.get("src") for t, a in tags if t == "script")
        assert not any(t in ("style", "iframe", "object", "embed", "base", "form") for t, _ in tags)


def test_every_address_leads_to_a_file_of_the_site() -> None:
    files = toy_site()
    for address, content in files.items():
        if not address.endswith(".html"):
            continue
        for _, attributes in tags_of(content):
            for key in ("src", "href"):
                target = (attributes.get(key) or "").partition("#")[0]
                if target and not target.startswith(
                    ("data:", "module-", "sensor-", "provenance.html", "method.html")
                ):
                    assert target in files, target


@pytest.mark.parametrize("text", HOSTILE)
def test_hostile_texts_stay_texts_in_every_part_of_a_page(text: str) -> None:
    calm, files = toy_site(), toy_site(text)
    assert len(files) == len(calm)
    page = files["index.html"]
    assert shape_of(page) == shape_of(calm["index.html"])
    for _, attributes in tags_of(page):
        for key in ("href", "src"):
            assert re.match(r"[\w./#-]*$|data:,", attributes.get(key) or ""), attributes[key]
    shown = html.unescape(page.decode("utf-8"))
    assert legible(text) in shown


@pytest.mark.parametrize("text", HOSTILE)
def test_hostile_texts_stay_values_in_the_data_script(text: str) -> None:
    script = toy_site(text)["data/index.js"].decode("utf-8")
    head, tail = "window.campaignPage = ", ";\n"
    assert script.startswith(head)
    assert script.endswith(tail)
    data = json.loads(script[len(head) : -len(tail)])
    assert data["values"]["text"] == legible(text)


@pytest.mark.parametrize("text", HOSTILE)
def test_no_address_leaves_the_folder(text: str) -> None:
    for address in toy_site(text):
        assert re.fullmatch(r"[\w-]+(/[\w.-]+)?|[\w.-]+\.html", address), address
        assert ".." not in address


def test_an_undefined_name_is_an_error(tmp_path: Path) -> None:
    (tmp_path / "broken.html").write_text("{{ nothing }}", encoding="utf-8")
    from jinja2 import UndefinedError

    from campaign.pages.page import SiteFrame
    from campaign.pages.render import render_site

    with pytest.raises(UndefinedError):
        render_site(SiteFrame("t", ()), [Page("index", 0, "t", "broken.html")], further_templates=[tmp_path])


def test_pages_and_tables_of_one_name_are_refused() -> None:
    with pytest.raises(ValueError, match="two pages are named INDEX"):
        site_of((toy_page(), toy_page(slug="INDEX", number=1)))
    other = toy_table()
    other.frame.loc[0, "slope"] = 2.0
    with pytest.raises(ValueError, match="two different tables are named toy_lines"):
        site_of((toy_page(),), tables=(other,))


def test_the_strip_shows_numbers_in_order_and_marks_the_page() -> None:
    pages = (toy_page(), toy_page(slug="provenance", number=14), toy_page(slug="variance", number=2))
    page = site_of(pages)["variance.html"].decode("utf-8")
    strip = page[page.index('<nav class="strip"') : page.index("</nav>")]
    assert re.findall(r'<span class="number">(\d+)</span>', strip) == ["0", "2", "14"]
    assert re.search(r'variance\.html" aria-current="page"', strip)


def test_invented_data_say_so_on_every_page() -> None:
    page = toy_site()["index.html"].decode("utf-8")
    assert page.count("invented") >= 2


def test_the_library_is_the_installed_plotlys_with_its_factory_in_parentheses() -> None:
    from plotly.offline import get_plotlyjs

    carried, written = get_plotlyjs(), library_bytes().decode("utf-8")
    assert len(written) == len(carried) + len("()\n") - (len(carried) - len(carried.rstrip()))
    assert re.search(r"self : this,\s*\(\(\) => \{", written[:2000])


def test_another_build_of_the_same_major_version_is_taken(tmp_path: Path) -> None:
    version = re.search(r"v(\d+)\.\d+\.\d+", library_bytes().decode("utf-8")[:500])
    assert version is not None
    build = tmp_path / "basic.js"
    build.write_text(
        f"/**\n* plotly.js (basic) v{version.group(1)}.0.0\n*/\nwindow.Plotly = {{}};\n", encoding="utf-8"
    )
    assert b"window.Plotly" in library_bytes(build)


@pytest.mark.parametrize("content", [None, "alert(1)", "/**\n* plotly.js v1.0.0\n*/"])
def test_a_file_that_is_no_such_build_stops_the_report(tmp_path: Path, content: str | None) -> None:
    build = tmp_path / "basic.js"
    if content is not None:
        build.write_text(content, encoding="utf-8")
    with pytest.raises(CampaignStops) as stopped:
        library_bytes(build)
    assert stopped.value.notices[0].file == "campaign.toml"
