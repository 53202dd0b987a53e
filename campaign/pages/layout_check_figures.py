"""Figures of what checks rebuilt shapes: the χ² test of every placement, and how errors grow."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.layout_results import AmplificationMap
from campaign.analyses.layout_tables import RISK, ChanceOfTests
from campaign.pages import numbers, palette, slugs
from campaign.pages.figures import (
    Figure,
    Trace,
    axis,
    label,
    level_line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.figures import (
    layout as one_panel,
)
from campaign.pages.layout_words import verdict_words

Row = Mapping[Hashable, Any]

MOST_MODULES = 40
"""Modules that the figure of tests draws, those with the smallest p first."""

SMALLEST_P = 1e-8
"""Probabilities below are drawn here."""


# --- tests


def chi_square_figure(table: pd.DataFrame, chance: ChanceOfTests, generations: Sequence[str]) -> Figure:
    """Return p of the χ² test of every placement read by own lines, a row a module."""
    rows = table[(table["read_by"] == chance.line) & table["p"].notna()]
    modules = sorted({(str(g), str(m)) for g, m in zip(rows["generation"], rows["module"], strict=True)})
    if len(modules) > MOST_MODULES:
        least = rows.groupby(["generation", "module"])["p"].min().sort_values(kind="stable")
        modules = sorted((str(g), str(m)) for g, m in least.index[:MOST_MODULES])
        rows = rows[[key in modules for key in zip(rows["generation"], rows["module"], strict=True)]]
    traces: list[Trace] = []
    sure = rows["p_adjusted"] < RISK
    for which, doubtless in ((rows[~sure], False), (rows[sure], True)):
        for generation, own in which.groupby("generation", sort=True):
            style = palette.generation_style(str(generation), tuple(generations))
            if doubtless:
                style = palette.GenerationStyle(palette.ATTENTION, "x", style.dash)
            records = own.to_dict("records")
            traces.append(
                points(
                    own["p"].clip(lower=SMALLEST_P),
                    [float(modules.index((str(r["generation"]), str(r["module"])))) for r in records],
                    style=style,
                    size=10 if doubtless else 7,
                    open_marker=not doubtless and style.symbol not in ("x",),
                    text=[_test_sentence(row) for row in records],
                    links=[
                        f"{slugs.module_href(str(r['module']))}#{slugs.trial_anchor(r['trial'])}"
                        for r in records
                    ],
                    axes="",
                )
            )
    ticks = [(float(i), module) for i, (_, module) in enumerate(modules)]
    labels = [
        label(
            "5 % limit of one test", RISK, -0.85, anchor="right", shift=(-5, 0), size=11, colour=palette.SOFT
        )
    ]
    for row in rows[sure].to_dict("records"):
        height = float(modules.index((str(row["generation"]), str(row["module"]))))
        place = max(float(row["p"]), SMALLEST_P)
        labels.append(label(f"placement {row['placement']}", place, height, shift=(9, 0)))
    smallest = min(float(rows["p"].clip(lower=SMALLEST_P).min()) / 2, 1e-3)
    return Figure(
        name="tests",
        caption=_test_caption(chance),
        alternative="Hollow dots, one a placement: p of the chi-square test on a logarithmic axis, by "
        "module; crosses where it remains beyond doubt with all tests counted.",
        traces=tuple(traces),
        layout=one_panel(
            axis("p of the χ² test", logarithmic=True, low=smallest, high=1.6, ticks=_decades(smallest)),
            axis("Module", ticks=ticks, low=-1.3, high=len(modules) - 0.4, reverse=True),
            shapes=[level_line(RISK, upright=True, colour=palette.INK)],
            annotations=labels,
        ),
        table="layout_placements",
        note="By own lines. Crosses: beyond 5 % with all placements counted (Holm). Placements of one module "
        "share its lines and move together."
        + (" Smaller p are drawn at 10⁻⁸." if smallest < 2 * SMALLEST_P else ""),
        height=max(220, 110 + 20 * len(modules)),
    )


def trial_link(row: Row) -> str:
    """Return the address of a placement's trial on its module's page."""
    return f"{slugs.module_href(str(row['module']))}#{slugs.trial_anchor(str(row['trial']))}"


def _decades(smallest: float) -> list[tuple[float, str]]:
    superscripts = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")
    plain = {0: "1", -1: "0.1", -2: "0.01", -3: "0.001"}
    first = math.ceil(math.log10(smallest) - 1e-9)
    exponents = range(first, 1)
    return [
        (10.0**e, plain.get(e, "10" + str(e).translate(superscripts)))
        for e in exponents
        if len(exponents) < 6 or e % 2 == 0
    ]


def _test_sentence(row: Row) -> str:
    chi = numbers.significant(float(row["chi_square"]), 3)
    name = f"{row['module']}, placement {row['placement']}"
    freedom = numbers.whole(float(row["network_redundancy"]))
    said = f"χ² = {chi}, redundancy {freedom}, {numbers.probability(float(row['p']))}"
    return f"{name}: {said}; {verdict_words(row)}"


def _test_caption(chance: ChanceOfTests) -> str:
    tested = numbers.count(chance.tested, "placement")
    expected = numbers.significant(chance.expected, 2)
    beyond = numbers.whole(chance.beyond) if chance.beyond else "None"
    said = (
        f"{beyond} of {tested} lie beyond the 5 % limit of one test, where chance makes {expected} on average"
    )
    sure = numbers.whole(chance.beyond_doubt) if chance.beyond_doubt else "none"
    return f"{said}; {sure} {'remain' if chance.beyond_doubt != 1 else 'remains'} with all tests counted."


# --- amplification


def map_figure(maps: Sequence[AmplificationMap]) -> Figure | None:
    """Return node SD per SD of a length over the reachable shapes, a panel a geometry."""
    known = [found for found in maps if np.isfinite(found.root_mean_square).any()]
    if not known:
        return None
    low = min(float(np.nanmin(_finite(found))) for found in known)
    high = max(float(np.nanmax(_finite(found))) for found in known)
    traces, labels, parts = [], [], []
    for index, found in enumerate(known):
        where = panel(index)
        own = _map_rows(found)
        fraction = (own["root_mean_square"] - low) / ((high - low) or 1.0)
        x, y = own["shear"], own["stretch"]
        casing = points(x, y, style=_SQUARE, size=11, axes=where)
        cells = points(
            x, y, style=_SQUARE, size=9, text=[_map_sentence(r) for r in own.to_dict("records")], axes=where
        )
        cells["marker"] = {**cells["marker"], "color": [palette.ramp_colour(value) for value in fraction]}
        traces += [casing, cells]
        ends = own.sort_values("root_mean_square", kind="stable").iloc[[0, -1]].to_dict("records")
        labels += [
            label(
                numbers.significant(r["root_mean_square"], 2),
                r["shear"],
                r["stretch"],
                axes=where,
                shift=(9, 0),
            )
            for r in ends
        ]
        values = [numbers.significant(r["root_mean_square"], 2) for r in ends]
        parts.append(f"{found.geometry} {'–'.join(dict.fromkeys(values))}")
    shear = max(float(np.abs(_map_rows(found)["shear"]).max()) for found in known)
    stretch = [value for found in known for value in _map_rows(found)["stretch"]]
    made = small_multiples(
        [found.geometry for found in known],
        axis("Shear, x per y", "mm/mm", low=-1.25 * shear - 0.02, high=1.25 * shear + 0.02),
        axis("Stretch along x", "mm/mm", low=min(stretch) - 0.03, high=max(stretch) + 0.03),
        columns=2,
    )
    made["annotations"] += labels
    return Figure(
        name="amplification",
        caption=f"Node SD per SD of a length, root mean square over the nodes: {', '.join(parts)} over all "
        "shapes that the calibrated range reaches.",
        alternative="Squares in a grid of stretch against shear, standing out the more the geometry "
        "amplifies errors of lengths; the smallest and the largest value stand beside theirs.",
        traces=tuple(traces),
        layout=made,
        data=pd.concat([_map_rows(found) for found in known], ignore_index=True),
        note="After best rigid fit, lengths independent with equal SD. The more a square stands out, the "
        "larger. Empty: a length would leave the calibrated range.",
        height=150 + 270 * -(-len(known) // 2),
    )


_SQUARE = palette.GenerationStyle(palette.SOFT, "square", "solid")


def _finite(found: AmplificationMap) -> np.ndarray[Any, np.dtype[np.float64]]:
    return np.where(np.isfinite(found.root_mean_square), found.root_mean_square, np.nan)


def _map_rows(found: AmplificationMap) -> pd.DataFrame:
    """One row a reachable shape."""
    values = _finite(found)
    at = np.argwhere(np.isfinite(values))
    by_node = {f"node_{name}": found.by_node[at[:, 0], at[:, 1], k] for k, name in enumerate(found.nodes)}
    return pd.DataFrame(
        {
            "geometry": found.geometry,
            "stretch": found.stretch[at[:, 0]],
            "shear": found.shear[at[:, 1]],
            "root_mean_square": values[at[:, 0], at[:, 1]],
            "largest": found.largest[at[:, 0], at[:, 1]],
            **by_node,
        }
    )


def _map_sentence(row: Row) -> str:
    mean, most = (numbers.significant(float(row[key]), 2) for key in ("root_mean_square", "largest"))
    stretch, shear = (numbers.fixed(float(row[key]), 2) for key in ("stretch", "shear"))
    return f"Stretch {stretch}, shear {shear}: {mean} over the nodes, {most} in the worst"
