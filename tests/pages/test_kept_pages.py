"""Kept pages: found where nothing that the rendering sees changed, and the same to the byte."""

from __future__ import annotations

import copy
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.keeping.store import Store, open_store
from campaign.keeping.value_codec import decode, encode
from campaign.pages import render
from campaign.pages.figures import Figure, axis, layout, line
from campaign.pages.kept_pages import PageFiles, digest_of_value
from campaign.pages.page import Page, SiteFrame
from campaign.pages.render import render_site

FRAME = SiteFrame("A campaign", ("Characterisation campaign",))
TEMPLATES = Path(__file__).parent / "templates"


def own_page(slug: str, level: float = 1.0, title: str = "M1 AB") -> Page:
    x = np.linspace(0.0, 40.0, 5)
    figure = Figure(
        name="line",
        caption="A line.",
        alternative="A line.",
        traces=(line(x, level * x, colour="#1b2530"),),
        layout=layout(axis("Strain", "%"), axis("Signal", "pF")),
        data=pd.DataFrame({"x": x, "signal": level * x}),
    )
    return Page(slug, None, title, "kept_page.html", {"level": level}, figures=(figure,))


def site(pages: list[Page], store: Store | None, frame: SiteFrame = FRAME) -> dict[str, bytes]:
    return render_site(frame, [], further_templates=(TEMPLATES,), own_pages=pages, store=store)


@pytest.fixture
def rendered(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Slugs of the pages that were rendered and not found."""
    slugs: list[str] = []
    real: Callable[..., PageFiles] = render._page_files

    def told(jinja: object, task: object, page: Page) -> PageFiles:
        slugs.append(page.slug)
        return real(jinja, task, page)

    monkeypatch.setattr(render, "_page_files", told)
    return slugs


def test_pages_of_an_earlier_run_are_found_and_are_the_same_to_the_byte(
    tmp_path: Path, rendered: list[str]
) -> None:
    pages = [own_page(f"sensor-M1-{i}", 1.0 + i) for i in range(11)]
    fresh = site(pages, None)
    for _ in range(2):
        with open_store(tmp_path / "kept.sqlite") as store:
            assert site(copy.deepcopy(pages), store) == fresh
    assert len(rendered) == 2 * len(pages)


def test_only_what_changed_is_rendered_again(tmp_path: Path, rendered: list[str]) -> None:
    pages = [own_page("sensor-M1-AB"), own_page("sensor-M1-BC")]
    with open_store(tmp_path / "kept.sqlite") as store:
        site(pages, store)
    changed = [pages[0], own_page("sensor-M1-BC", np.nextafter(1.0, 2.0))]
    rendered.clear()
    with open_store(tmp_path / "kept.sqlite") as store:
        found = site(changed, store)
    assert rendered == ["sensor-M1-BC"]
    assert found == site(changed, None)


def test_what_all_pages_share_counts_too(tmp_path: Path, rendered: list[str]) -> None:
    pages = [own_page("sensor-M1-AB")]
    for frame in (FRAME, replace(FRAME, title="Another"), replace(FRAME, rehearsal=True)):
        with open_store(tmp_path / "kept.sqlite") as store:
            assert site(pages, store, frame) == site(pages, None, frame)
    assert len(rendered) == 6


def test_a_changed_template_counts_too(tmp_path: Path, rendered: list[str]) -> None:
    folder = tmp_path / "templates"
    folder.mkdir()
    (folder / "own_words.html").write_text("{% extends 'kept_page.html' %}", encoding="utf-8")
    page = replace(own_page("sensor-M1-AB"), template="own_words.html")
    texts = []
    for words in ("", "{% block content %}other words{% endblock %}"):
        (folder / "own_words.html").write_text("{% extends 'kept_page.html' %}" + words, encoding="utf-8")
        render._kept_environment.cache_clear()
        with open_store(tmp_path / "kept.sqlite") as store:
            made = render_site(
                FRAME, [], further_templates=(TEMPLATES, folder), own_pages=[page], store=store
            )
        texts.append(made["sensor-M1-AB.html"])
    assert len(rendered) == 2
    assert texts[0] != texts[1]


def test_a_page_that_holds_what_has_no_name_is_rendered_every_time(
    tmp_path: Path, rendered: list[str]
) -> None:
    page = replace(own_page("sensor-M1-AB"), context={"level": 1.0, "told": lambda: "nothing"})
    for _ in range(2):
        with open_store(tmp_path / "kept.sqlite") as store:
            site([page], store)
    assert rendered == ["sensor-M1-AB", "sensor-M1-AB"]


def test_a_value_that_went_through_bytes_has_the_digest_that_it_had() -> None:
    shared = np.arange(4.0)
    table = pd.DataFrame({"a": [1.0, np.nan], "b": ["x", None], "c": [True, False]}, index=[3, 5])
    value = {"one": shared, "two": shared, "table": table, "row": table["a"]}
    assert digest_of_value(decode(encode(value))) == digest_of_value(value)
    split = pd.concat([table[["a"]], table[["b"]], table[["c"]]], axis=1)
    assert digest_of_value(split) == digest_of_value(table)
    assert digest_of_value(np.asfortranarray(np.eye(3) + 1)) == digest_of_value(np.eye(3) + 1)


_PLAIN = st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False) | st.text(max_size=3)
_VALUES = st.recursive(
    _PLAIN, lambda own: st.lists(own, max_size=3) | st.dictionaries(st.text(max_size=2), own, max_size=3)
)


@given(_VALUES, _VALUES)
def test_values_have_one_digest_where_they_are_written_alike(first: object, second: object) -> None:
    alike = repr(first) == repr(second)
    assert (digest_of_value(first) == digest_of_value(second)) == alike


@pytest.mark.parametrize(
    ("one", "other"),
    [
        (np.array([1.0, 2.0]), np.array([[1.0, 2.0]])),
        (np.array([1.0]), np.array([1.0], dtype=np.float32)),
        (pd.Series([1, 2], name="a"), pd.Series([1, 2], name="b")),
        (pd.DataFrame({"a": [1]}), pd.DataFrame({"b": [1]})),
        (pd.DataFrame({"a": [1]}), pd.DataFrame({"a": [1]}, index=[7])),
        (pd.DataFrame({"a": [1, 2]}), pd.DataFrame({"a": [1.0, 2.0]})),
        (own_page("a"), own_page("a", title="other")),
    ],
)
def test_values_that_differ_have_other_digests(one: object, other: object) -> None:
    assert digest_of_value(one) is not None
    assert digest_of_value(one) != digest_of_value(other)
