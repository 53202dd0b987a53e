"""What lets a reader pick a placement: a script a module with its drawings, and the list to pick from."""

from __future__ import annotations

from collections.abc import Mapping

import orjson
import pandas as pd

from campaign.analyses.layout_results import GENERATION_LINE, LINES, Layout, Placement
from campaign.analyses.layout_tables import placement_table
from campaign.pages import slugs
from campaign.pages.drawing import ready
from campaign.pages.layout_shapes import shape_figure
from campaign.pages.layout_words import line_words, placement_caption, placement_sentence
from campaign.pages.page_data import folded_figures, script_value

Key = tuple[str, str, str, int, str]


def layout_script_address(module: str, line: str) -> str:
    """Return the address of the script with the drawings of a module's placements by one choice of lines."""
    return f"data/layout-{slugs.module_slug(module)}-{LINES.index(line) + 1}.js"


def layout_scripts(layout: Layout | None) -> dict[str, bytes]:
    """Return a classic script a module and choice of lines that hands page 8 its placements, by address.

    Each holds folded figures by the number of the placement, their captions, and what is
    said of them.
    """
    if layout is None:
        return {}
    generations = sorted({own.generation for own in layout.placements})
    adjusted = adjusted_probabilities(layout)
    made = {}
    for module, placements in placements_of_modules(layout).items():
        for choice in LINES:
            chosen = {str(k): lines[choice] for k, lines in enumerate(placements.values()) if choice in lines}
            views = {key: ready(shape_figure(own, generations)) for key, own in chosen.items()}
            said = {key: placement_sentence(own, adjusted[own.key, choice]) for key, own in chosen.items()}
            address = layout_script_address(module, choice)
            captions = {key: placement_caption(own) for key, own in chosen.items()}
            content = {**folded_figures(views), "said": said, "captions": captions}
            start = b"(window.campaignShapes = window.campaignShapes || {})["
            made[address] = start + orjson.dumps(address) + b"] = " + script_value(content) + b";\n"
    return made


def placements_of_modules(layout: Layout) -> dict[str, dict[tuple[str, int, str], dict[str, Placement]]]:
    """Module → (trial, repetition, name) → choice of lines → placement, all in order."""
    found: dict[str, dict[tuple[str, int, str], dict[str, Placement]]] = {}
    for own in layout.placements:
        trials = found.setdefault(own.module, {})
        trials.setdefault((own.trial, own.repetition, own.name), {})[own.line] = own
    return dict(sorted(found.items()))


def adjusted_probabilities(layout: Layout) -> dict[tuple[Key, str], float]:
    """(What names a placement, choice of lines) → p of its χ² test with all others counted; NaN untested."""
    table = placement_table(layout)
    values = table["p_adjusted"].to_numpy(float).tolist()
    return {(own.key, own.line): p for own, p in zip(layout.placements, values, strict=True)}


def layout_choices(layout: Layout, first: Placement) -> Mapping[str, object]:
    """Return what the page's script lets a reader pick: modules, placements and choices of lines."""
    modules = []
    for module, placements in placements_of_modules(layout).items():
        runs = {(trial, repetition) for trial, repetition, _ in placements}
        names = [
            name if len(runs) == 1 else f"{name} of run {repetition}" for _, repetition, name in placements
        ]
        modules.append(
            {
                "module": module,
                "scripts": [layout_script_address(module, choice) for choice in LINES],
                "placements": names,
                "lines": [[LINES.index(choice) for choice in lines] for lines in placements.values()],
            }
        )
    own = list(placements_of_modules(layout)[first.module])
    return {
        "modules": modules,
        "lines": [line_words(choice) for choice in LINES],
        "first": [
            first.module,
            own.index((first.trial, first.repetition, first.name)),
            LINES.index(first.line),
        ],
    }


def first_shown(layout: Layout, sure: pd.DataFrame) -> Placement:
    """Return the placement that the page shows first: a named bad length, else the one furthest off.

    *sure* are rows of :func:`campaign.analyses.layout_tables.bad_lengths`, the surest first.
    """
    own = [p for p in layout.placements if p.line != GENERATION_LINE]
    named = sure[sure["suspected"] != ""].index
    if len(named):
        return layout.placements[int(named[0])]
    return max(own, key=lambda p: p.after_fit.rms_mm if p.after_fit is not None else -1.0)
