"""Ids of any kind become names of files that are unique, plain, and stay in the folder."""

from __future__ import annotations

import re

from hypothesis import given
from hypothesis import strategies as st

from campaign.pages import slugs


def test_plain_ids_stand_as_they_are() -> None:
    assert slugs.module_slug("M01") == "module-M01"
    assert slugs.sensor_slug("M01", "AB") == "sensor-M01-AB"
    assert slugs.trial_href("M01", "AB", "T1") == "sensor-M01-AB.html#trial-T1"


def test_twins_by_case_differ_also_where_case_is_ignored() -> None:
    names = [slugs.slug(text) for text in ("M01", "m01", "panel", "Panel", "PANEL", "pAnel")]
    assert len({name.casefold() for name in names}) == len(names)


def test_ids_that_fold_to_the_same_letters_differ() -> None:
    texts = ["a b", "a-b", "a/b", "a_b", "a.b", "ä b", "a  b", " a b", "../a/b", "袖口", "袖", "", "-", "."]
    assert len({slugs.slug(text).casefold() for text in texts}) == len(texts)


def test_parts_cannot_be_mistaken_for_each_other() -> None:
    assert slugs.sensor_slug("A-B", "C") != slugs.sensor_slug("A", "B-C")


@given(st.text(max_size=200))
def test_a_slug_is_a_plain_name_and_always_the_same(text: str) -> None:
    name = slugs.slug(text)
    assert re.fullmatch(r"[A-Za-z0-9_]{1,40}", name)
    assert slugs.slug(text) == name


@given(st.lists(st.text(max_size=12), unique=True, max_size=30))
def test_different_ids_have_different_slugs(texts: list[str]) -> None:
    assert len({slugs.slug(text).casefold() for text in texts}) == len(texts)
