"""The documents and the code agree: commands, options, notice codes, rooms, imports, words.

Run as a script it writes the table of notice codes into DEVELOPERS.md again.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

from campaign import cli
from campaign.cli import main
from campaign.notices import NOTICE_CODES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
START, END = "<!-- notices: written by tests/test_documents.py -->", "<!-- end of notices -->"

LADDER = (
    "cli",
    "archiving",
    "pipeline",
    "earlier_campaigns",
    "campaign_reading",
    "rehearsal",
    "kept_report",
    "provenance",
    "pages",
    "analyses",
    "trials",
    "recordings",
    "archive",
    "workers",
    "keeping",
    "methods",
    "units",
    "notices",
)
"""Rooms from left to right: each may import itself and what stands to its right."""


def notice_table() -> str:
    rows = [f"| `{code}` | {meaning} |" for code, meaning in sorted(NOTICE_CODES.items())]
    return "\n".join(["| code | meaning |", "|---|---|", *rows])


def test_every_notice_code_is_in_the_manual_with_its_meaning() -> None:
    written = DEVELOPERS[DEVELOPERS.index(START) + len(START) : DEVELOPERS.index(END)].strip()
    assert written == notice_table(), "refresh with: python tests/test_documents.py"


def _help(capsys: pytest.CaptureFixture[str], *words: str) -> str:
    with pytest.raises(SystemExit) as end:
        main([*words, "--help"])
    assert end.value.code == 0
    return capsys.readouterr().out


def test_every_command_and_option_is_in_the_readme(capsys: pytest.CaptureFixture[str]) -> None:
    commands = re.findall(r"^    ([a-z]+)  ", _help(capsys), re.MULTILINE)
    assert {"report", "inspect", "begin", "rehearse", "seal", "verify"} <= set(commands)
    for command in commands:
        words = _help(capsys, command)
        read = "PLAN" if " PLAN\n" in words else "FOLDER"
        assert f"`campaign {command} {read}" in README
        for option in set(re.findall(r"--[a-z][a-z-]+", words)) - {"--help"}:
            assert f"`{option}" in README, f"{command} {option}"
    assert "`campaign --version`" in README


def test_every_exit_status_is_in_the_readme() -> None:
    for status in (cli.DONE, cli.SET_ASIDE, cli.STOPPED, cli.INTERRUPTED):
        assert re.search(rf"^\| {status} \|", README, re.MULTILINE)


def _sources() -> dict[str, Path]:
    files = sorted((ROOT / "campaign").rglob("*.py"))
    return {".".join(f.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__"): f for f in files}


def _imports(file: Path) -> Iterator[str]:
    """Modules of ours that *file* imports, also inside functions and for type checking."""
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names if alias.name.split(".")[0] == "campaign")
        elif isinstance(node, ast.ImportFrom) and (node.module or "").split(".")[0] == "campaign":
            assert node.level == 0
            for alias in node.names:
                inner = f"{node.module}.{alias.name}"
                yield inner if inner in SOURCES else str(node.module)


SOURCES = _sources()


def _room(module: str) -> str:
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else ""


def _may_import(room: str, other: str) -> bool:
    if other in ("", room) or room in ("", "__main__"):
        return True
    if room == "simulation":
        return other in ("methods", "units")
    if room == "methods":
        return other == "units"
    if other == "simulation":
        return room in ("cli", "pipeline", "rehearsal")
    return LADDER.index(room) < LADDER.index(other)


def test_imports_point_one_way_down_the_ladder() -> None:
    wrong = [
        f"{module} imports {other}"
        for module, file in SOURCES.items()
        for other in _imports(file)
        if not _may_import(_room(module), _room(other))
    ]
    assert wrong == []


def _top_level_imports(file: Path) -> Iterator[str]:
    for node in ast.parse(file.read_text(encoding="utf-8")).body:
        if isinstance(node, ast.ImportFrom) and (node.module or "").split(".")[0] == "campaign":
            for alias in node.names:
                inner = f"{node.module}.{alias.name}"
                yield inner if inner in SOURCES else str(node.module)


def test_no_module_imports_itself_by_way_of_others() -> None:
    graph = {module: set(_top_level_imports(file)) - {module} for module, file in SOURCES.items()}
    packages = {module for module, file in SOURCES.items() if file.name == "__init__.py"}
    remaining = {
        module: {other for other in others if other not in packages} for module, others in graph.items()
    }
    while free := [module for module, others in remaining.items() if not others & remaining.keys()]:
        for module in free:
            del remaining[module]
    assert remaining == {}


def test_no_module_is_named_for_nothing() -> None:
    names = {module.rsplit(".", 1)[-1] for module in SOURCES}
    assert names & {"utils", "util", "helpers", "helper", "common", "misc", "tools"} == set()


@pytest.mark.parametrize("word", ["safe", "certified", "approved"])
def test_pages_promise_nothing_that_a_report_cannot(word: str) -> None:
    """Comments and filter names are not read by readers; everything else in templates and pages is."""
    found = []
    for file in (*(ROOT / "site_templates").rglob("*.html"), *(ROOT / "campaign" / "pages").glob("*.py")):
        text = re.sub(r"\{#.*?#\}|\|\s*safe\b", "", file.read_text(encoding="utf-8"), flags=re.DOTALL)
        if re.search(rf"\b{word}\b", text, re.IGNORECASE):
            found.append(file.name)
    assert found == []


def test_commands_of_the_readme_are_marked_for_those_who_run_them() -> None:
    for name, ends in (("report", "campaign report demo_campaign"), ("tests", "-m pytest -n 2")):
        block = re.search(rf"<!-- command: {name} -->\n```sh\n(.*?)\n```", README, re.DOTALL)
        assert block is not None
        assert block.group(1).endswith(ends)
        assert "requirements.lock" in block.group(1)


def test_links_of_the_documents_lead_to_files() -> None:
    for text in (README, DEVELOPERS):
        for address in re.findall(r"\]\(([^)#]+)\)", text):
            assert (ROOT / address).exists(), address


def test_benchmarks_of_the_manual_are_those_that_there_are() -> None:
    named = set(re.findall(r"benchmarks/(\w+\.py)", DEVELOPERS))
    assert named == {file.name for file in (ROOT / "benchmarks").glob("*.py")}


def test_rooms_of_the_manual_are_there() -> None:
    section = DEVELOPERS[DEVELOPERS.index("## Rooms") : DEVELOPERS.index("Imports point one way")]
    rows = [line.split(" | ")[0] for line in section.splitlines() if line.startswith("| `")]
    rooms = [room for row in rows for room in re.findall(r"`([^`]+)`", row)]
    assert len(rooms) > 12
    assert [room for room in rooms if not (ROOT / room).exists()] == []
    packages = {module.split(".")[1] for module in SOURCES if module.count(".") >= 1}
    described = {Path(room).stem for room in rooms}
    assert packages - described - {"__main__"} == set()


def write_notice_table() -> None:
    """Write the table of notice codes into DEVELOPERS.md."""
    before, after = DEVELOPERS.split(START)[0], DEVELOPERS.split(END)[1]
    text = f"{before}{START}\n{notice_table()}\n{END}{after}"
    (ROOT / "DEVELOPERS.md").write_text(text, encoding="utf-8")


if __name__ == "__main__":
    write_notice_table()
