"""The program in its own archive: its source, a wheel of it, and the versions that it ran with.

A sealed archive is made on a user's machine, where there may be neither a network nor the tools that build
packages. So the source is gathered from the installation as it stands, and the wheel (PyPA binary
distribution format, version 1.0) is written from it with the standard library, the same bytes each time. The
demonstration campaign is left out of both; ``python -m campaign.simulation`` makes it again.
"""

from __future__ import annotations

import base64
import hashlib
import json
import platform
import re
import sys
import tomllib
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.metadata import Distribution, PackageNotFoundError, distribution
from pathlib import Path

from campaign import __version__
from campaign.archive import archive_bytes
from campaign.pages.templates import templates_folder

PACKAGE = Path(__file__).resolve().parents[1]
DISTRIBUTION = "campaign-report"

_SCRIPTS = "console_scripts"
_TEMPLATES = "site_templates"
_LEFT_OUT = ("__pycache__", "demo_campaign", _TEMPLATES)
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]*")


@dataclass(frozen=True)
class Software:
    """The program as files of an archive.

    Attributes
    ----------
    version
        Of the program.
    files
        Contents by path: ``source/…`` (installable with pip), the wheel, ``requirements.txt``,
        ``versions.json``.
    wheel
        Name of the wheel among the files.
    """

    version: str
    files: Mapping[str, bytes]
    wheel: str


def gather_software() -> Software:
    """Return the running program: its source, its wheel and the versions of what it ran with."""
    project = running_project()
    source = source_files(project)
    name = f"{_wheel_name(project)}-{project.version}-py3-none-any.whl"
    pins = pinned_requirements(project)
    files = {f"source/{path}": content for path, content in source.items()}
    files[name] = wheel_bytes(project, source)
    files["requirements.txt"] = "".join(f"{pin}\n" for pin in pins).encode()
    files["versions.json"] = json.dumps(_versions(pins), indent=2, sort_keys=True).encode() + b"\n"
    return Software(project.version, dict(sorted(files.items())), name)


@dataclass(frozen=True)
class Project:
    """What the program says of itself: in its checkout, or in the records of its installation."""

    name: str
    version: str
    summary: str
    python: str
    dependencies: tuple[str, ...]
    scripts: tuple[tuple[str, str], ...]
    readme: str
    licence: str


def running_project() -> Project:
    """Return what the running program says of itself; a checkout and an installation of it say the same."""
    beside = PACKAGE.parent
    if all((beside / name).is_file() for name in ("pyproject.toml", "README.md", "LICENSE")):
        return _project_of_checkout(beside)
    return project_of_installation(distribution(DISTRIBUTION))


def _project_of_checkout(folder: Path) -> Project:
    said = tomllib.loads((folder / "pyproject.toml").read_text("utf-8"))["project"]
    return Project(
        name=said["name"],
        version=__version__,
        summary=said["description"],
        python=said["requires-python"],
        dependencies=tuple(said["dependencies"]),
        scripts=tuple(sorted(said["scripts"].items())),
        readme=(folder / "README.md").read_text("utf-8"),
        licence=(folder / "LICENSE").read_text("utf-8"),
    )


def project_of_installation(installed: Distribution) -> Project:
    """Return what the records of an installed program say of it."""
    records = installed.metadata
    return Project(
        name=records["Name"],
        version=__version__,
        summary=records["Summary"],
        python=records["Requires-Python"],
        dependencies=tuple(text for text in installed.requires or [] if "extra ==" not in text),
        scripts=tuple(sorted((e.name, e.value) for e in installed.entry_points if e.group == _SCRIPTS)),
        readme=(installed.read_text("METADATA") or "").partition("\n\n")[2],
        licence=installed.read_text("licenses/LICENSE") or "",
    )


def source_files(project: Project) -> dict[str, bytes]:
    """Return the program's source by path: what it runs from, and a project file that installs it."""
    files = {f"campaign/{path}": content for path, content in _files_of(PACKAGE).items()}
    files |= {f"{_TEMPLATES}/{path}": content for path, content in _files_of(templates_folder()).items()}
    files["README.md"], files["LICENSE"] = project.readme.encode(), project.licence.encode()
    files["pyproject.toml"] = _PROJECT.format(
        name=project.name,
        version=project.version,
        summary=json.dumps(project.summary, ensure_ascii=False),
        python=project.python,
        dependencies="".join(f"  {json.dumps(text)},\n" for text in project.dependencies),
        scripts="".join(f"{name} = {json.dumps(place)}\n" for name, place in project.scripts),
    ).encode()
    return dict(sorted(files.items()))


_PROJECT = """# Written for this archive: what installs the program, without the tools of its makers.
[build-system]
requires = ["hatchling>=1.24"]
build-backend = "hatchling.build"

[project]
name = "{name}"
version = "{version}"
description = {summary}
readme = "README.md"
requires-python = "{python}"
dependencies = [
{dependencies}]

[project.scripts]
{scripts}
[tool.hatch.build.targets.wheel]
only-include = ["campaign", "site_templates"]

[tool.hatch.build.targets.wheel.sources]
"site_templates" = "campaign/site_templates"
"""


def _files_of(folder: Path) -> dict[str, bytes]:
    """Every file below *folder* by its path, but for what is compiled or left out."""
    found = {}
    for path in sorted(folder.rglob("*")):
        parts = path.relative_to(folder).parts
        if path.is_file() and path.suffix != ".pyc" and not set(parts) & set(_LEFT_OUT):
            found["/".join(parts)] = path.read_bytes()
    return found


def wheel_bytes(project: Project, source: Mapping[str, bytes]) -> bytes:
    """Return a wheel of the program made of its *source* (:func:`source_files`).

    It holds what the build of the repository puts into one, but for the demonstration campaign.
    """
    information = f"{_wheel_name(project)}-{project.version}.dist-info"
    files = {_place_in_wheel(path): content for path, content in source.items() if "/" in path}
    files |= {
        f"{information}/METADATA": _metadata(project).encode(),
        f"{information}/WHEEL": _WHEEL.encode(),
        f"{information}/entry_points.txt": _entry_points(project).encode(),
        f"{information}/licenses/LICENSE": project.licence.encode(),
    }
    record = "".join(f"{path},{_digest(content)},{len(content)}\n" for path, content in sorted(files.items()))
    listing = f"{information}/RECORD"
    return archive_bytes({**files, listing: f"{record}{listing},,\n".encode()})


_WHEEL = "Wheel-Version: 1.0\nGenerator: campaign-report\nRoot-Is-Purelib: true\nTag: py3-none-any\n"


def _place_in_wheel(path: str) -> str:
    return f"campaign/{path}" if path.startswith(f"{_TEMPLATES}/") else path


def _wheel_name(project: Project) -> str:
    return re.sub(r"[-_.]+", "_", project.name).lower()


def _digest(content: bytes) -> str:
    digest = base64.urlsafe_b64encode(hashlib.sha256(content).digest()).decode().rstrip("=")
    return f"sha256={digest}"


def _metadata(project: Project) -> str:
    lines = [
        "Metadata-Version: 2.1",
        f"Name: {project.name}",
        f"Version: {project.version}",
        f"Summary: {project.summary}",
        f"Requires-Python: {project.python}",
        *(f"Requires-Dist: {dependency}" for dependency in project.dependencies),
        "License-File: LICENSE",
        "Description-Content-Type: text/markdown",
    ]
    return "\n".join(lines) + f"\n\n{project.readme}"


def _entry_points(project: Project) -> str:
    return f"[{_SCRIPTS}]\n" + "".join(f"{name} = {place}\n" for name, place in project.scripts)


def pinned_requirements(project: Project) -> list[str]:
    """Return ``name==version`` of all that the program stands on in the running environment, sorted.

    What its dependencies require in turn is followed, extras apart; the program itself is not among them.
    """
    found: dict[str, str] = {}
    waiting = [requirement_name(text) for text in project.dependencies]
    while waiting:
        wanted = waiting.pop()
        if wanted in found or wanted == _plain(project.name):
            continue
        try:
            installed = distribution(wanted)
        except PackageNotFoundError:
            continue
        found[wanted] = f"{installed.metadata['Name']}=={installed.version}"
        waiting += [requirement_name(text) for text in installed.requires or [] if "extra ==" not in text]
    return [found[key] for key in sorted(found)]


def requirement_name(requirement: str) -> str:
    """Return the normalised name in a requirement such as ``Jinja2>=3.1; python_version > "3"`` (PEP 503)."""
    match = _NAME.match(requirement.strip())
    return _plain(match.group()) if match else ""


def _plain(name: str) -> str:
    return re.sub(r"[-_.]+", "-", name).lower()


def _versions(requirements: list[str]) -> dict[str, object]:
    return {
        "campaign-report": __version__,
        "python": platform.python_version(),
        "implementation": platform.python_implementation(),
        "byte order": sys.byteorder,
        "zlib": zlib.ZLIB_RUNTIME_VERSION,
        "packages": dict(pin.split("==", 1) for pin in requirements),
    }
