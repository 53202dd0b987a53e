"""Every notice that the source can make has a code that is explained, in one plain line."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import campaign
from campaign.notices import NOTICE_CODES

SOURCES = sorted(Path(campaign.__file__).parent.joinpath("recordings").glob("*.py"))
MAKERS = {
    "Notice",
    "_aside",
    "_notice",
    "_assumed",
    "_of_row",
    "_not_read",
    "_stops",
    "_note",
    "note",
    "add",
    "fault",
}
CODE = re.compile(r"[a-z]+(?:-[a-z0-9]+)+")


def codes_made(source: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(source.read_text(encoding="utf-8"))):
        if not isinstance(node, ast.Call):
            continue
        name = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
        if name in MAKERS:
            texts = [a.value for a in node.args if isinstance(a, ast.Constant) and isinstance(a.value, str)]
            yield from (text for text in texts if CODE.fullmatch(text))


def test_every_code_in_the_source_is_explained() -> None:
    made = {code for source in SOURCES for code in codes_made(source)}
    assert len(made) > 60
    assert sorted(made - set(NOTICE_CODES)) == []


def test_codes_are_explained_in_one_plain_line_each() -> None:
    for code, meaning in NOTICE_CODES.items():
        assert re.fullmatch(r"[a-z0-9]+(?:-[a-z0-9]+)*", code)
        assert meaning[0].islower() or meaning.startswith(("[", "campaign"))
        assert not meaning.endswith(".")
        assert "\n" not in meaning
