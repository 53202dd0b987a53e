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
from campaign.pages.render import templates_folder

PACKAGE = Path(__file__).resolve().parents[1]
DISTRIBUTION = "campaign-report"
AT_THE_TOP = ("pyproject.toml", "README.md", "LICENSE", "requirements.lock")
"""Files of the source beside the package; where only the package is installed, they are made again."""

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
    source = source_files()
    project = tomllib.loads(source["pyproject.toml"].decode("utf-8"))["project"]
    name = f"{_wheel_name(project)}-{__version__}-py3-none-any.whl"
    requirements = pinned_requirements(str(project["name"]), list(project["dependencies"]))
    files = {f"source/{path}": content for path, content in source.items()}
    files[name] = wheel_bytes(source)
    files["requirements.txt"] = "".join(f"{pin}\n" for pin in requirements).encode()
    files["versions.json"] = json.dumps(_versions(requirements), indent=2, sort_keys=True).encode() + b"\n"
    return Software(__version__, dict(sorted(files.items())), name)


def source_files() -> dict[str, bytes]:
    """Return the program's source by path, as in its repository but for tests and the demonstration."""
    files = {f"campaign/{path}": content for path, content in _files_of(PACKAGE).items()}
    files |= {f"{_TEMPLATES}/{path}": content for path, content in _files_of(templates_folder()).items()}
    return dict(sorted({**files, **_top_files()}.items()))


def _top_files() -> dict[str, bytes]:
    """The files beside the package in a checkout, else the same from the installation's records."""
    beside = [PACKAGE.parent / name for name in AT_THE_TOP]
    if all(path.is_file() for path in beside):
        return {path.name: path.read_bytes() for path in beside}
    return top_files_of_installation(distribution(DISTRIBUTION))


def top_files_of_installation(installed: Distribution) -> dict[str, bytes]:
    """Return project file, README, licence and pins as the records of an installed program give them."""
    records = installed.metadata
    dependencies = [text for text in installed.requires or [] if "extra ==" not in text]
    scripts = {e.name: e.value for e in installed.entry_points if e.group == "console_scripts"}
    project = _PROJECT.format(
        name=records["Name"],
        version=installed.version,
        summary=json.dumps(records["Summary"], ensure_ascii=False),
        python=records["Requires-Python"],
        dependencies="".join(f"  {json.dumps(text)},\n" for text in dependencies),
        scripts="".join(f"{name} = {json.dumps(place)}\n" for name, place in sorted(scripts.items())),
    )
    pins = pinned_requirements(records["Name"], dependencies)
    return {
        "pyproject.toml": project.encode(),
        "README.md": (installed.read_text("METADATA") or "").partition("\n\n")[2].encode(),
        "LICENSE": (installed.read_text("licenses/LICENSE") or "").encode(),
        "requirements.lock": "".join(f"{pin}\n" for pin in pins).encode(),
    }


_PROJECT = """# Written again from the records of an installed program.
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


def wheel_bytes(source: Mapping[str, bytes]) -> bytes:
    """Return a wheel of the program made of its *source* (:func:`source_files`).

    It holds what the build of the repository puts into one, but for the demonstration campaign.
    """
    project = tomllib.loads(source["pyproject.toml"].decode("utf-8"))["project"]
    information = f"{_wheel_name(project)}-{__version__}.dist-info"
    files = {_place_in_wheel(path): content for path, content in source.items() if path not in AT_THE_TOP}
    files |= {
        f"{information}/METADATA": _metadata(project, source["README.md"].decode("utf-8")).encode(),
        f"{information}/WHEEL": _WHEEL.encode(),
        f"{information}/entry_points.txt": _entry_points(project).encode(),
        f"{information}/licenses/LICENSE": source["LICENSE"],
    }
    record = "".join(f"{path},{_digest(content)},{len(content)}\n" for path, content in sorted(files.items()))
    listing = f"{information}/RECORD"
    return archive_bytes({**files, listing: f"{record}{listing},,\n".encode()})


_WHEEL = "Wheel-Version: 1.0\nGenerator: campaign-report\nRoot-Is-Purelib: true\nTag: py3-none-any\n"


def _place_in_wheel(path: str) -> str:
    return f"campaign/{path}" if path.startswith(f"{_TEMPLATES}/") else path


def _wheel_name(project: Mapping[str, object]) -> str:
    return re.sub(r"[-_.]+", "_", str(project["name"])).lower()


def _digest(content: bytes) -> str:
    digest = base64.urlsafe_b64encode(hashlib.sha256(content).digest()).decode().rstrip("=")
    return f"sha256={digest}"


def _metadata(project: Mapping[str, object], readme: str) -> str:
    dependencies = project["dependencies"]
    assert isinstance(dependencies, list)
    lines = [
        "Metadata-Version: 2.1",
        f"Name: {project['name']}",
        f"Version: {__version__}",
        f"Summary: {project['description']}",
        f"Requires-Python: {project['requires-python']}",
        *(f"Requires-Dist: {dependency}" for dependency in dependencies),
        "License-File: LICENSE",
        "Description-Content-Type: text/markdown",
    ]
    return "\n".join(lines) + f"\n\n{readme}"


def _entry_points(project: Mapping[str, object]) -> str:
    scripts = project["scripts"]
    assert isinstance(scripts, dict)
    return "[console_scripts]\n" + "".join(f"{name} = {place}\n" for name, place in sorted(scripts.items()))


def pinned_requirements(name: str, dependencies: list[str]) -> list[str]:
    """Return ``name==version`` of all that the program stands on in the running environment, sorted.

    Parameters
    ----------
    name
        The program itself, which is not among them.
    dependencies
        What it requires; what those require in turn is followed, extras apart.
    """
    found: dict[str, str] = {}
    waiting = [requirement_name(text) for text in dependencies]
    while waiting:
        wanted = waiting.pop()
        if wanted in found or wanted == _plain(name):
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
