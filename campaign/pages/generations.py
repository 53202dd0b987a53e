"""Page 9, Generations: is the new one better, by how much, how sure."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator

import pandas as pd

from campaign.analyses.earlier import EarlierCampaign
from campaign.analyses.generation_figures import FIGURES
from campaign.analyses.generation_findings import GenerationFinding
from campaign.analyses.generation_pairs import AT_COMMON_POSITIONS, NOT_TESTED, POOLED
from campaign.analyses.generations import Confounded, Generations
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, palette
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    intervals,
    layout,
    level_line,
    line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.generation_words import (
    capitalised,
    comparison_sentence,
    comparison_words,
    figure_anchor,
    figure_words,
    margin_words,
    shown_unit,
    verdict_words,
)
from campaign.pages.page import Page
from campaign.pages.rows import records_of
from campaign.pages.tables import Column, Table

SHOWN = ("better", "worse", "larger", "smaller", "equivalent")
"""Beginnings of verdicts that are drawn filled: something is shown."""


def generations_page(results: CampaignResults) -> Page | None:
    """Return page 9, or ``None`` where there are no two generations to compare."""
    compared = results.generations
    if compared is None or compared.table.empty:
        return None
    facts = [f for one in results.findings.findings if one.kind == "generations" for f in one.facts]
    joined = joined_table(results)
    return Page(
        slug="generations",
        number=9,
        title="Generations",
        template="generations.html",
        context={
            "compared": compared,
            "facts": [fact for fact in facts if isinstance(fact, GenerationFinding)],
            "earlier": results.earlier,
            "figure_words": figure_words,
            "figure_anchor": figure_anchor,
            "comparison_sentence": comparison_sentence,
            "notices": [*compared.notices, *_joining_notices(results)],
            "confounded": _confounded(compared),
            "at_common_positions": bool(compared.table["label"].eq(AT_COMMON_POSITIONS).any()),
            "has_pooled": bool(compared.table["label"].str.startswith(POOLED).any()),
            "margins": bool(compared.table["margin"].notna().any()),
        },
        figures=tuple(comparison_figures(compared, results.earlier)),
        tables=(generations_table(compared), *((joined,) if joined is not None else ())),
        description="Every headline figure of every two generations, with intervals and verdicts.",
    )


def _confounded(compared: Generations) -> list[Confounded]:
    """What differs together with the generation; campaigns once, against the newest."""
    newest = compared.names[-1]
    return [one for one in compared.confounded if one.what != "campaign" or one.second == newest]


def _joining_notices(results: CampaignResults) -> list[object]:
    codes = ("earlier-not-joined", "earlier-not-followed", "earlier-renamed", "earlier-rescaled")
    return [notice for notice in results.notices if notice.code in codes]


def comparison_figures(compared: Generations, earlier: Iterable[EarlierCampaign] = ()) -> Iterator[Figure]:
    """Return the newest against each other: ratios, differences by unit, then the module means."""
    table = compared.table
    tested = table["verdict"] != NOT_TESTED
    table = table[(table["second"] == compared.names[-1]) & tested].reset_index(drop=True)
    ratios = table[(table["kind"] == "ratio") & table["difference_or_ratio"].notna()]
    if len(ratios):
        ends = _ratio_ends(ratios)
        yield _rows_figure(
            "ratios",
            ratios,
            compared,
            axis("Newer over older", "", logarithmic=True, low=ends[0], high=ends[1], ticks=_ticks(*ends)),
            centre=1.0,
            caption=_caption(ratios, "Ratios"),
            note=f"One: no change. Left of it the newer modules have less. {_reading(ratios)}",
        )
    differences = table[(table["kind"] == "difference") & table["difference_or_ratio"].notna()]
    for unit in dict.fromkeys(differences["unit"].astype(str)):
        rows = differences[differences["unit"] == unit]
        factor, shown = shown_unit(unit)
        ends = _ends(rows, factor)
        yield _rows_figure(
            f"differences-{list(dict.fromkeys(differences['unit'].astype(str))).index(unit) + 1}",
            rows,
            compared,
            axis("Change", shown, low=ends[0], high=ends[1]),
            centre=0.0,
            caption=_caption(rows, "Differences"),
            note="Change: the newer less the older. Left of zero the newer modules have less. "
            f"{_reading(rows)}",
        )
    yield from module_figures(compared, earlier)


def _reading(rows: pd.DataFrame) -> str:
    """How marks and bands are read."""
    marks = (
        "Filled: a verdict, with p corrected for the family; open: none, even where the interval excludes it."
    )
    if rows["margin"].isna().all():
        return marks
    return f"{marks} Grey band: the margin within which two figures count as equivalent."


def _ratio_ends(rows: pd.DataFrame) -> tuple[float, float]:
    """Ends of the axis of ratios: everything that is finite, at most a factor of thirty about one."""
    values = [float(v) for key in ("low", "difference_or_ratio", "high") for v in rows[key]]
    finite = [min(max(v, 1 / 30), 30.0) for v in values if math.isfinite(v) and v > 0]
    return min([*finite, 0.9]) / 1.15, max([*finite, 1.1]) * 1.15


def _ticks(low: float, high: float) -> list[tuple[float, str]]:
    """Ratios to label: few where the axis is long."""
    places: tuple[float, ...] = (0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0)
    if high / low < 4:
        places = (0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.2, 1.4, 1.6, 2.0, 2.5, 3.0)
    return [(place, f"{place:g}") for place in places if low <= place <= high]


def _ends(rows: pd.DataFrame, factor: float) -> tuple[float, float]:
    values = [float(v) * factor for key in ("low", "difference_or_ratio", "high") for v in rows[key]]
    values += [s * float(m) * factor for m in rows["margin"].dropna() for s in (-1, 1)]
    finite = [v for v in (*values, 0.0) if math.isfinite(v)]
    room = 0.08 * (max(finite) - min(finite) or 1.0)
    return min(finite) - room, max(finite) + room


def _rows_figure(
    name: str,
    rows: pd.DataFrame,
    compared: Generations,
    x: Layout,
    *,
    centre: float,
    caption: str,
    note: str,
) -> Figure:
    """One row a figure and pair: estimate and interval along the common axis, labelled at the left."""
    factor = 1.0 if centre else shown_unit(str(rows["unit"].iloc[0]))[0]
    several = len(set(zip(rows["first"], rows["second"], strict=True))) > 1
    heights = [float(place) for place in range(len(rows))]
    names = [capitalised(figure_words(str(figure))) for figure in rows["figure"]]
    ticks = [
        (h, f"{n}, {first} → {second}" if several else n)
        for h, n, first, second in zip(heights, names, rows["first"], rows["second"], strict=True)
    ]
    traces = [*_bands(rows, heights, factor, bool(centre)), *_marks(rows, heights, factor, compared, x)]
    y = axis("", ticks=[(h, _broken(t)) for h, t in ticks], low=-0.7, high=len(rows) - 0.3, reverse=True)
    made = layout(x, y, shapes=[level_line(centre, upright=True)])
    return Figure(
        name=name,
        caption=caption,
        alternative="One row a figure and pair of generations: the estimate with its 95 % interval against "
        f"{'one' if centre else 'zero'}.",
        traces=tuple(traces),
        layout=made | {"margin": {"l": 204}},
        table="generations",
        note=note,
        height=110 + (46 if several else 34) * len(rows),
    )


def _broken(text: str) -> str:
    """A label in two lines: the figure, then the pair."""
    return text.replace(", ", "\n", 1) if "→" in text else text


def _bands(rows: pd.DataFrame, heights: list[float], factor: float, ratio: bool) -> Iterator[Trace]:
    for margin, height in zip(rows["margin"], heights, strict=True):
        if not math.isfinite(margin):
            continue
        low, high = (1 / (1 + margin), 1 + margin) if ratio else (-margin * factor, margin * factor)
        yield line([low, high], [height, height], colour=palette.RULE, width=12)


def _marks(
    rows: pd.DataFrame, heights: list[float], factor: float, compared: Generations, x: Layout
) -> Iterator[Trace]:
    ends = [10**e for e in x["range"]] if x.get("type") == "log" else list(x["range"])
    for row, height in zip(records_of(rows), heights, strict=True):
        estimate, low, high = (float(row[key]) * factor for key in ("difference_or_ratio", "low", "high"))
        estimate = max(estimate, ends[0])  # a ratio of zero has no place on its axis but the end
        low = max(low, ends[0]) if not math.isnan(low) else low
        high = min(high, ends[1]) if not math.isnan(high) else high
        pair = f"{row['first']} → {row['second']}, "
        said = f"{pair}{comparison_sentence(row)}: {verdict_words(str(row['verdict']))}"
        yield intervals(
            [estimate],
            [low],
            [high],
            [height],
            style=palette.generation_style(str(row["second"]), _palette_order(compared)),
            open_marker=not str(row["verdict"]).startswith(SHOWN),
            size=9,
            text=[said],
            name=figure_words(str(row["figure"])),
        )


def _palette_order(compared: Generations) -> tuple[str, ...]:
    """Own generations first and sorted, so that they keep the colours of the other pages."""
    own = compared.sources[compared.names[-1]]
    mine = sorted(name for name in compared.names if compared.sources[name] == own)
    return (*mine, *(name for name in compared.names if compared.sources[name] != own))


def _caption(rows: pd.DataFrame, what: str) -> str:
    verdicts = rows["verdict"].astype(str)
    counts = {word: int(verdicts.str.startswith(word).sum()) for word in SHOWN}
    parts = [f"{number} {verdict_words(word)}" for word, number in counts.items() if number]
    open_ = int(verdicts.eq("not decided").sum())
    parts += [f"{open_} not decided"] if open_ else []
    few = int(verdicts.eq("too few modules").sum())
    parts += [f"{few} with too few modules for a verdict"] if few else []
    unit = shown_unit(str(rows["unit"].iloc[0]))[1]
    kind = f"{what} in {unit}" if what == "Differences" and unit else what
    against = "of the newer to the older" if what == "Ratios" else "of the newer from the older"
    return f"{kind} {against} generation with 95 % intervals: {', '.join(parts)}."


def module_figures(compared: Generations, earlier: Iterable[EarlierCampaign] = ()) -> Iterator[Figure]:
    """Return the module means behind the comparisons, one panel a figure, scaled to its largest value.

    Generations that were read over another range than this campaign's are drawn only for figures that do not
    depend on it: the eye would compare what the table does not.
    """
    frame = _drawn_modules(compared, earlier)
    known = [
        name for name in dict.fromkeys(frame["figure"]) if frame[frame["figure"] == name]["value"].gt(0).any()
    ]
    several = [n for n in known if frame[frame["figure"] == n]["generation"].nunique() > 1]
    if not several:
        return
    order = _palette_order(compared)
    traces: list[Trace] = []
    for index, name in enumerate(several):
        own = frame[(frame["figure"] == name)]
        largest = float(own["value"].abs().max())
        for place, generation in enumerate(compared.names):
            rows = own[own["generation"] == generation]
            if rows.empty:
                continue
            factor, unit = shown_unit(str(rows["unit"].iloc[0]))
            spread = [place + 0.24 * (k - (len(rows) - 1) / 2) / max(len(rows), 1) for k in range(len(rows))]
            text = [
                f"{generation}, {module}: {figure_words(name)} {numbers.significant(value * factor, 3, unit)}"
                for module, value in zip(rows["module"], rows["value"], strict=True)
            ]
            style = palette.generation_style(generation, order)
            traces.append(
                points(
                    spread,
                    rows["value"] / largest,
                    style=style,
                    text=text,
                    name=generation,
                    axes=panel(index),
                )
            )
            mean = float(rows["value"].mean()) / largest
            traces.append(
                line(
                    [place - 0.28, place + 0.28],
                    [mean, mean],
                    colour=style.colour,
                    width=2,
                    axes=panel(index),
                )
            )
    ticks = [(float(i), _two_lines(name)) for i, name in enumerate(compared.names)]
    made = small_multiples(
        [_panel_title(name, frame) for name in several],
        axis("", ticks=ticks, low=-0.6, high=len(compared.names) - 0.4, tickangle=0),
        axis("", low=0.0, high=1.08),
        columns=2,
        gap=(0.06, 0.055),
        margin={"t": 44},
    )
    yield Figure(
        name="modules",
        caption="The modules behind the comparisons, as a share of the largest: a point a module, a bar at "
        "the mean of a generation.",
        alternative="One panel a figure: the mean of each module by generation, as a share of the largest.",
        traces=tuple(traces),
        layout=made,
        data=frame,
        note="Each panel ends at its largest module, whose value stands above it. Modules are drawn over the "
        "positions that all share; those read over another range are left out where it matters.",
        height=90 + 150 * math.ceil(len(several) / 2),
    )


def _drawn_modules(compared: Generations, earlier: Iterable[EarlierCampaign]) -> pd.DataFrame:
    other_range = {name for one in earlier if one.restricted is not None for name in one.order}
    conditional = {figure.name for figure in FIGURES if figure.conditions}
    frame = compared.modules
    unlike = frame["figure"].isin(conditional) & frame["generation"].isin(other_range)
    return frame[frame["generation"].isin(compared.names) & ~unlike]


def _two_lines(name: str) -> str:
    """A generation's name in two lines where it can be parted: on a narrow axis neighbours would touch."""
    first, hyphen, rest = name.partition("-")
    return f"{first}-\n{rest}" if hyphen else name.replace(" ", "\n", 1)


def _panel_title(name: str, frame: pd.DataFrame) -> str:
    own = frame[frame["figure"] == name]
    factor, unit = shown_unit(str(own["unit"].iloc[0]))
    largest = numbers.significant(float(own["value"].max()) * factor, 2, unit)
    return f"{capitalised(figure_words(name))},\nto {largest}"


def generations_table(compared: Generations) -> Table:
    """Return every comparison as a table."""
    table = compared.table
    rows = records_of(table)
    factors = [shown_unit(str(row["unit"])) for row in rows]
    frame = table.assign(
        _figure=[capitalised(figure_words(str(row["figure"]))) for row in rows],
        _href=[f"method.html#{figure_anchor(str(row['figure']))}" for row in rows],
        _unit=[unit for _, unit in factors],
        _first=[v * f for v, (f, _) in zip(table["estimate_first"], factors, strict=True)],
        _second=[v * f for v, (f, _) in zip(table["estimate_second"], factors, strict=True)],
        _compared=[comparison_words(row) for row in rows],
        _margin=[margin_words(row) for row in rows],
        _verdict=[_verdict_cell(row) for row in rows],
        _modules=[f"{row['modules_first']}, {row['modules_second']}" for row in rows],
    )
    columns = [
        Column("_figure", "Figure", kind="text", href="_href"),
        Column("first", "Older", kind="text"),
        Column("_first", "Its value", digits=3),
        Column("second", "Newer", kind="text"),
        Column("_second", "Its value", digits=3),
        Column("_unit", "Unit", kind="text"),
        Column("_compared", "Difference, or times", kind="text"),
        Column("_modules", "Modules", kind="text"),
        Column("df", "df", digits=2, missing="–"),
        Column("p_adjusted", "p, family", kind="probability", missing="–"),
    ]
    has_margins = bool(table["margin"].notna().any())
    if has_margins:
        columns.append(Column("_margin", "Margin", kind="text"))
        columns.append(Column("p_equivalence_adjusted", "p, equivalence", kind="probability", missing="–"))
    columns.append(Column("_verdict", "The newer is", kind="text"))
    return Table(
        name="generations",
        caption="Every headline figure of every two generations.",
        frame=frame,
        columns=tuple(columns),
        shown_rows=max(int(table["second"].eq(compared.names[-1]).sum()), 1),
        note="Values are means over positions and modules, or SDs as strain. Intervals are of one comparison "
        f"by itself (95 %); p is corrected by Holm over all {compared.family} tests"
        f"{', p of equivalence over its own' if has_margins else ''}. df are degrees of freedom by Welch; "
        "SDs are compared by the intervals of page 2 and have none.",
        mark=("", ""),
    )


def _verdict_cell(row: dict[object, object]) -> str:
    words, restriction = verdict_words(str(row["verdict"])), str(row["label"])
    return f"{words} ({restriction})" if restriction and restriction != AT_COMMON_POSITIONS else words


def joined_table(results: CampaignResults) -> Table | None:
    """Return the earlier campaigns that were joined, ``None`` where there are none."""
    if not results.earlier:
        return None
    frame = pd.DataFrame([_joined_row(one, results) for one in results.earlier])
    scale = results.readings.reference
    return Table(
        name="earlier_campaigns",
        caption="Earlier campaigns that take part in the comparison.",
        frame=frame,
        columns=(
            Column("campaign", "Campaign", kind="text"),
            Column("folder", "Named as", kind="code"),
            Column("generations", "Generations", kind="text"),
            Column("modules", "Modules", kind="integer"),
            Column("sensors", "Sensors", kind="integer"),
            Column("recordings", "Recordings", kind="integer"),
            Column(
                "full_scale", "Full scale", scale.shown_unit, factor=scale.shown_factor, digits=3, missing="–"
            ),
        ),
        note="Their files and hashes stand on the page Provenance.",
        mark=("", ""),
    )


def _joined_row(one: EarlierCampaign, results: CampaignResults) -> dict[str, object]:
    same = bool(one.offers.unit) and one.offers.unit == results.readings.reference.unit
    return {
        "campaign": one.title + (" (invented)" if one.simulated and "invented" not in one.title else ""),
        "folder": one.where,
        "generations": ", ".join(one.order),
        "modules": one.modules,
        "sensors": one.sensors,
        "recordings": one.recordings,
        "full_scale": one.full_scale if same else math.nan,
    }


def earlier_files_table(earlier: Iterable[EarlierCampaign]) -> Table | None:
    """Return the files of earlier campaigns with their hashes, for the page Provenance."""
    rows = [
        {"campaign": one.where, "file": file, "sha256": one.hashes[file]}
        for one in earlier
        for file in sorted(one.hashes)
    ]
    if not rows:
        return None
    return Table(
        name="earlier_files",
        caption="Files of earlier campaigns that were opened for the comparison.",
        frame=pd.DataFrame(rows),
        columns=(
            Column("campaign", "Campaign", kind="code"),
            Column("file", "File", kind="code"),
            Column("sha256", "SHA-256", kind="code"),
        ),
        shown_rows=60,
        mark=("", ""),
    )
