"""Licences by their SPDX identifiers, as far as data and descriptions of hardware usually carry them."""

from __future__ import annotations

from dataclasses import dataclass

_CREATIVE_COMMONS = "https://creativecommons.org"
_OPEN_DATA = "https://opendatacommons.org/licenses"


@dataclass(frozen=True)
class Licence:
    """A licence: its identifier, its name, and where it stands."""

    identifier: str
    name: str
    url: str


def find_licence(text: str) -> Licence | None:
    """Return the licence that *text* names, as identifier or address, or ``None`` where it is not known."""
    wanted = text.strip().casefold().rstrip("/")
    return next(
        (
            known
            for known in KNOWN
            if wanted in (known.identifier.casefold(), known.url.casefold().rstrip("/"))
        ),
        None,
    )


def _creative_commons(kind: str, words: str) -> Licence:
    return Licence(
        f"CC-{kind}-4.0",
        f"Creative Commons {words} 4.0 International",
        f"{_CREATIVE_COMMONS}/licenses/{kind.lower()}/4.0/",
    )


def _of_spdx(identifier: str, name: str) -> Licence:
    return Licence(identifier, name, f"https://spdx.org/licenses/{identifier}")


KNOWN: tuple[Licence, ...] = (
    Licence(
        "CC0-1.0",
        "Creative Commons Zero 1.0 Universal",
        f"{_CREATIVE_COMMONS}/publicdomain/zero/1.0/",
    ),
    _creative_commons("BY", "Attribution"),
    _creative_commons("BY-SA", "Attribution Share Alike"),
    _creative_commons("BY-NC", "Attribution Non Commercial"),
    _creative_commons("BY-ND", "Attribution No Derivatives"),
    _creative_commons("BY-NC-SA", "Attribution Non Commercial Share Alike"),
    _creative_commons("BY-NC-ND", "Attribution Non Commercial No Derivatives"),
    Licence("ODbL-1.0", "Open Data Commons Open Database License 1.0", f"{_OPEN_DATA}/odbl/1-0/"),
    Licence("ODC-By-1.0", "Open Data Commons Attribution License 1.0", f"{_OPEN_DATA}/by/1-0/"),
    Licence(
        "PDDL-1.0", "Open Data Commons Public Domain Dedication and License 1.0", f"{_OPEN_DATA}/pddl/1-0/"
    ),
    _of_spdx("MIT", "MIT License"),
    _of_spdx("Apache-2.0", "Apache License 2.0"),
    _of_spdx("BSD-2-Clause", "BSD 2-Clause License"),
    _of_spdx("BSD-3-Clause", "BSD 3-Clause License"),
    _of_spdx("GPL-3.0-only", "GNU General Public License 3.0 only"),
    _of_spdx("GPL-3.0-or-later", "GNU General Public License 3.0 or later"),
    _of_spdx("CERN-OHL-P-2.0", "CERN Open Hardware Licence 2, permissive"),
    _of_spdx("CERN-OHL-W-2.0", "CERN Open Hardware Licence 2, weakly reciprocal"),
    _of_spdx("CERN-OHL-S-2.0", "CERN Open Hardware Licence 2, strongly reciprocal"),
)
"""Licences that are known here."""
