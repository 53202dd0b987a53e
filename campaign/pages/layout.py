"""Page 8, Layout: what shape comes back from the lengths, and why it is off."""

from __future__ import annotations

import pandas as pd

from campaign.analyses.layout_findings import layout_facts
from campaign.analyses.layout_results import LINES, OWN_LINE, Layout
from campaign.analyses.layout_tables import (
    RISK,
    amplification_facts,
    bad_lengths,
    chance_of_tests,
    node_table,
    placement_table,
    unsolved,
)
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, slugs
from campaign.pages.figures import Figure
from campaign.pages.layout_check_figures import chi_square_figure, map_figure
from campaign.pages.layout_error_figures import agreement_figure, edge_figure, error_figure
from campaign.pages.layout_scripts import adjusted_probabilities, first_shown, layout_choices
from campaign.pages.layout_shapes import shape_figure
from campaign.pages.layout_words import (
    SHORT_LINE_WORDS,
    STATEMENT_WORDS,
    line_words,
    placement_sentence,
    verdict_words,
)
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table

_SHOWN = 200


def layout_page(results: CampaignResults) -> Page | None:
    """Return page 8, or ``None`` where no placement could be read."""
    found = results.layout
    if found is None:
        return None
    table = placement_table(found)
    generations = sorted(set(table["generation"].astype(str)))
    first = first_shown(found, bad_lengths(table, OWN_LINE))
    chances = [chance for line in LINES if (chance := chance_of_tests(table, line)) is not None]
    p_adjusted = adjusted_probabilities(found)[first.key, first.line]
    return Page(
        slug="layout",
        number=8,
        title="Layout",
        template="layout.html",
        context={
            "facts": layout_facts(found, results.limits),
            "chances": chances,
            "line_words": line_words,
            "geometries": amplification_facts(found),
            "statement_words": STATEMENT_WORDS,
            "unsolved": unsolved(table, OWN_LINE),
            "first_order": _first_order(found, table),
            "labels": list(found.labels.values()),
            "said": placement_sentence(first, p_adjusted),
            "datum": first.datum,
            "counts": _counts(table),
            "known_to": max(p.known_uncertainty_mm for p in found.placements),
        },
        figures=_figures(found, table, generations, first_figure=_first_figure(found, table, generations)),
        tables=(errors_table(found), placements_table(table)),
        data={"layout": layout_choices(found, first)},
        description="What shape comes back from the lengths, how far off it is, and what the tests can tell.",
    )


def _first_figure(found: Layout, table: pd.DataFrame, generations: list[str]) -> Figure:
    sure = bad_lengths(table, OWN_LINE)
    first = first_shown(found, sure)
    row = table.iloc[found.placements.index(first)].to_dict()
    name = f"{first.module}, placement {first.name}"
    if float(row["p_adjusted"]) < RISK:
        caption = f"The tests find a bad length in {name}: {verdict_words(row)}."
    elif first.after_fit is not None:
        size = numbers.significant(first.after_fit.rms_mm, 2, "mm")
        caption = (
            f"Furthest off is {name}: {size} after the best rigid fit (root mean square over its nodes)."
        )
    else:
        caption = f"{name}: {first.status}."
    note = (
        "Dotted and hollow: known. Solid and filled: rebuilt, with 95 % ellipses of what calibration and "
        "known positions predict between the two. Dashes: no length. Cross and heavy dashes: suspected."
    )
    return shape_figure(first, generations, caption, note)


def _figures(
    found: Layout, table: pd.DataFrame, generations: list[str], first_figure: Figure
) -> tuple[Figure, ...]:
    chance = chance_of_tests(table, OWN_LINE)
    made = (
        first_figure,
        error_figure(found),
        agreement_figure(found, node_table(found.nodes)),
        edge_figure(found, generations),
        chi_square_figure(table, chance, generations) if chance is not None else None,
        map_figure(found.amplification),
    )
    return tuple(figure for figure in made if figure is not None)


def _counts(table: pd.DataFrame) -> dict[str, int]:
    own = table[table["read_by"] == OWN_LINE]
    return {
        "placements": len(own),
        "modules": int(own["module"].nunique()),
        "untested": int((own["verdict"].ne("") & own["p"].isna()).sum()),
    }


def _first_order(found: Layout, table: pd.DataFrame) -> dict[str, object]:
    """Where first-order propagation fails, and how sums of edges compare."""
    rows = table[(table["read_by"] == OWN_LINE) & (table["verdict"] != "")]
    drawn = [p.monte_carlo for p in found.of_line(OWN_LINE) if p.monte_carlo is not None]
    sums = found.sums[found.sums["read_by"] == OWN_LINE]
    failing = rows[rows["first_order_fails"]]
    return {
        "placements": len(rows),
        "failing": [f"{r['module']}, placement {r['placement']}" for r in failing.to_dict("records")],
        "failed_draws": int(rows["failed_draws"].sum()),
        "draws": min((one.draws for one in drawn), default=0),
        "tolerance": drawn[0].tolerance if drawn else float("nan"),
        "sum_sd": float(sums["sd_mm"].median()) if len(sums) else float("nan"),
        "sum_drawn": float(sums["sd_monte_carlo_mm"].median()) if len(sums) else float("nan"),
        "sum_alone": float(sums["sd_independent_mm"].median()) if len(sums) else float("nan"),
    }


# --- tables


def errors_table(found: Layout) -> Table:
    """Return errors of nodes and edges by generation and module, beside predicted limits."""
    parts = [part[(part["read_by"] == line)] for part in (found.errors, found.by_module) for line in LINES]
    frame = pd.concat(parts, ignore_index=True)
    frame = frame.assign(
        _who=[str(row["module"]) or f"all of {row['generation']}" for row in frame.to_dict("records")],
        _href=[slugs.module_href(str(m)) if m else "" for m in frame["module"]],
        _line=[SHORT_LINE_WORDS[str(line)] for line in frame["read_by"]],
        _error=frame["figure"],
    )
    return Table(
        name="layout_errors",
        caption="Errors of nodes and edges beside what calibration and known positions alone predict.",
        frame=frame,
        columns=(
            Column("_who", "Module", kind="text", href="_href"),
            Column("_line", "Read by", kind="text"),
            Column("_error", "Error", kind="text"),
            Column("placements", "Placements", kind="integer"),
            Column("rms_mm", "Root mean square", "mm", digits=2),
            Column("predicted_rms_mm", "predicted", "mm", interval=("predicted_low_mm", "predicted_high_mm")),
            Column("largest_mm", "Largest", "mm", digits=2),
            Column(
                "predicted_largest_mm",
                "predicted",
                "mm",
                interval=("predicted_largest_low_mm", "predicted_largest_high_mm"),
            ),
            Column("ratio", "Observed / predicted", interval=("ratio_low", "ratio_high")),
        ),
        source="layout_errors",
        shown_rows=_SHOWN,
        rows_in_page=6,
        mark=("module", "sensor"),
        note="Brackets of predictions hold 95 % of them. Generations first, own lines first.",
    )


def placements_table(table: pd.DataFrame) -> Table:
    """Return every placement with its tests, the least probable first."""
    frame = table.sort_values(["p", "module", "placement"], kind="stable")
    records = frame.to_dict("records")
    frame = frame.assign(
        _href=[
            f"{slugs.module_href(str(r['module']))}#{slugs.trial_anchor(str(r['trial']))}" for r in records
        ],
        _line=[SHORT_LINE_WORDS[str(line)] for line in frame["read_by"]],
        _verdict=[verdict_words(row) for row in records],
    )
    own = frame["read_by"] == OWN_LINE
    return Table(
        name="layout_placements",
        caption="Every placement with its tests, those read by own lines first, the least probable on top.",
        frame=pd.concat([frame[own], frame[~own]], ignore_index=True),
        columns=(
            Column("module", "Module", kind="text", href="_href"),
            Column("placement", "Placement", kind="text"),
            Column("_line", "Read by", kind="text"),
            Column("network_redundancy", "Redundancy", kind="integer"),
            Column("chi_square", "χ²", digits=3, missing="no test"),
            Column("p", "p", kind="probability", missing="–"),
            Column("p_adjusted", "p, all counted", kind="probability", missing="–"),
            Column("_verdict", "Verdict", kind="text"),
            Column("fit_rms_mm", "Node error", "mm", digits=2, missing="not known"),
            Column("fit_predicted_mm", "predicted", "mm", digits=2, missing="not known"),
        ),
        shown_rows=_SHOWN,
        rows_in_page=8,
        note="Node errors are root mean squares after the best rigid fit. p with all counted is Holm’s.",
    )
