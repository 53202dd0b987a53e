"""Page 2, Variance: where the spread comes from."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Mapping
from typing import Any

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.analyses.variance import Variance
from campaign.pages import numbers, palette, slugs
from campaign.pages.component_words import level_words, sd_words
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    bars,
    intervals,
    label,
    layout,
    level_line,
    line,
    panel,
    small_multiples,
)
from campaign.pages.page import Page
from campaign.pages.rows import records_of
from campaign.pages.tables import Column, Table
from campaign.pages.variance_tables import planned_tables, tables_beside_components
from campaign.recordings.recording import ReferenceQuantity

LEVELS = (
    *("batch", "module", "mounting", "run", "sensor", "session", "repetition", "sensor_by_level"),
    *("sensor_by_direction", "residual", "total"),
)
"""Levels of nesting in the order in which figures show them."""

TERM_WORDS: Mapping[str, str] = {"strain at mid": "signal at mid range, as strain"}
"""What terms of effects are called where their name does not say it."""

TABLES = (
    "planned_components",
    *("components_in_strain", "component_ratios", "precision", "new_sensor", "ratio_components"),
    *("identifiability", "run_numbers", "variance_components", "component_tests"),
    *("fixed_effects", "fit_certificates"),
)
"""Tables in the order in which the page has them, and so their numbers."""

TERMS = ("strain at mid", "slope", "intercept")
"""Terms of effects, the most telling first."""

COVARIATE_UNITS: Mapping[str, str] = {
    "temperature": "°C",
    "temperature_c": "°C",
    "humidity": "%RH",
    "humidity_percent": "%RH",
}
"""Units of the surroundings that the model may hold."""

PLACES: Mapping[str, str] = {"zero": "at zero", "mid": "at mid range", "full": "at full scale"}
"""Places of the range, in order."""


def variance_page(results: CampaignResults) -> Page | None:
    """Return page 2, or ``None`` where no variance could be analysed."""
    variance = results.variance
    if variance is None or variance.variance_in_strain.empty:
        return None
    figures = [
        components_figure(variance),
        shares_figure(variance),
        caterpillar_figure(variance, "module"),
        caterpillar_figure(variance, "sensor"),
    ]
    return Page(
        slug="variance",
        number=2,
        title="Variance",
        template="variance.html",
        context={
            "variance": variance,
            "reference": variance.reference,
            "spread": next((f for f in results.findings.findings if f.kind == "spread"), None),
            "level_words": level_words,
            "pooled": any(fit.generation == "all" for fit in variance.fits) and len(variance.fits) > 1,
            "covariate_units": COVARIATE_UNITS,
            "largest_difference": float(variance.certificate["difference"].abs().max()),
            "generations": generations_of(variance.variance_in_strain),
            "zero_noise": _zero_noise(variance),
        },
        figures=tuple(figure for figure in figures if figure is not None),
        tables=tuple(
            sorted(
                (*planned_tables(results), *_tables(variance), *tables_beside_components(variance)),
                key=lambda table: TABLES.index(table.name),
            )
        ),
        description="How much of the spread lies between batches, modules, sensors, mountings and runs.",
    )


def _zero_noise(variance: Variance) -> list[dict[Hashable, Any]]:
    """The noise of the zero signals in strain, generation by generation."""
    noise = variance.ratio_zero_noise
    return records_of(noise[noise["generation"].isin(generations_of(noise))])


def generations_of(frame: pd.DataFrame) -> tuple[str, ...]:
    """Return the generations of a table in order, the pooled fit ``all`` left out unless it stands alone."""
    names = sorted(set(frame["generation"].astype(str)))
    apart = tuple(name for name in names if name != "all")
    return apart or tuple(names)


def _levels_in_order(frame: pd.DataFrame) -> list[str]:
    found = list(dict.fromkeys(frame["level"].astype(str)))
    return sorted(found, key=lambda name: LEVELS.index(name) if name in LEVELS else len(LEVELS))


def _called(frame: pd.DataFrame) -> dict[str, str]:
    """Words of each level; where generations differ in them, those of the first."""
    words: dict[str, str] = {}
    for level, called in zip(frame["level"].astype(str), frame["called"].astype(str), strict=True):
        words.setdefault(level, level_words(called))
    return words


def components_figure(variance: Variance) -> Figure:
    """Return every component as strain-equivalent SD with its interval, at zero, mid and full scale."""
    table = variance.variance_in_strain
    generations = generations_of(table)
    table = table[table["generation"].isin(generations)]
    levels, words = _levels_in_order(table), _called(table)
    places = [place for place in PLACES if place in set(table["place"])]
    edges = _edges(table)
    factor, unit = variance.reference.shown_factor, variance.reference.shown_unit
    traces: list[Trace] = []
    for index, place in enumerate(places):
        for order, generation in enumerate(generations):
            rows = table[(table["place"] == place) & (table["generation"] == generation)]
            shift = (order - (len(generations) - 1) / 2) * min(0.24, 0.7 / len(generations))
            heights = [levels.index(str(level)) + shift for level in rows["level"]]
            style = palette.generation_style(generation, generations)
            traces += _component_traces(rows, heights, style, edges, factor, unit, panel(index))
    ticks = [(float(i), words[level]) for i, level in enumerate(levels)]
    made = small_multiples(
        [PLACES[place] for place in places],
        axis("SD", unit, low=edges[0] * factor, high=edges[1] * factor, logarithmic=True),
        axis("", ticks=ticks, low=-0.6, high=len(levels) - 0.4, reverse=True),
        columns=len(places),
        annotations=_generation_key(generations, len(places)),
    )
    return Figure(
        name="components",
        caption=_components_caption(table, variance.reference),
        alternative="Dots with 95 % intervals on a logarithmic axis: strain-equivalent standard deviation "
        "of each "
        "level of nesting, panels for zero, mid range and full scale, generations apart.",
        traces=tuple(traces),
        layout=made | {"margin": {"l": 176, "t": 46}},
        table="variance_in_strain",
        note="Logarithmic. Bars are 95 % limits by profile likelihood; one that runs out on the left is not "
        "distinguishable from zero, one that runs out on the right goes on. A thin line without a dot: the "
        "design gives limits only.",
        height=150 + 46 * len(levels),
    )


def _edges(table: pd.DataFrame) -> tuple[float, float]:
    """Ends of the logarithmic axis: below the smallest estimate, and where limits beyond are cut."""
    estimates = table["strain_sd"].dropna()
    positive = estimates[estimates > 0]
    if positive.empty:
        return 1e-5, 1.0
    return float(positive.min()) / 2.5, float(positive.max()) * 2.5


def _component_traces(
    rows: pd.DataFrame,
    heights: list[float],
    style: palette.GenerationStyle,
    edges: tuple[float, float],
    factor: float,
    unit: str,
    axes: str,
) -> list[Trace]:
    """Dots with bars, and for components with limits only a thin line up to the upper one."""
    rows = rows.assign(_height=heights)
    low = rows["low"].clip(*edges).fillna(rows["strain_sd"])
    high = rows["high"].clip(*edges).fillna(rows["strain_sd"])
    rows = rows.assign(_low=low, _high=high)
    stated = rows[rows["strain_sd"] > edges[0]]
    limits_only = rows[~(rows["strain_sd"] > edges[0]) & rows["high"].notna()]
    made = [
        line(
            [r["_low"] * factor, r["_high"] * factor],
            [r["_height"]] * 2,
            colour=style.colour,
            dash="dot",
            width=1,
            text=[_component_sentence(r, factor, unit)] * 2,
            axes=axes,
        )
        for r in records_of(limits_only)
    ]
    dots = intervals(
        stated["strain_sd"] * factor,
        stated["_low"] * factor,
        stated["_high"] * factor,
        stated["_height"],
        style=style,
        text=[_component_sentence(r, factor, unit) for r in records_of(stated)],
        axes=axes,
    )
    return [*made, dots]


def _component_sentence(row: Mapping[Hashable, Any], factor: float, unit: str) -> str:
    return f"{row['generation']}, {level_words(str(row['called']))}: {sd_words(row, factor, unit)}"


def _generation_key(generations: tuple[str, ...], panels: int) -> list[Layout]:
    """Direct labels that tell generations apart, above the last panel; none for a single generation."""
    if len(generations) < 2:
        return []
    styles = [palette.generation_style(g, generations) for g in generations]
    return [
        label(
            f"{_MARKS.get(style.symbol, '●')} {generation}",
            1.0,
            1.0,
            colour=style.colour,
            anchor="right",
            axes=panel(panels - 1),
            shift=(-110 * (len(generations) - 1 - i), 26),
            paper=True,
        )
        for i, (generation, style) in enumerate(zip(generations, styles, strict=True))
    ]


_MARKS = {"circle": "●", "square": "■", "diamond": "◆", "triangle-up": "▲", "x": "✕"}


def _components_caption(table: pd.DataFrame, reference: ReferenceQuantity) -> str:
    mid = table[(table["place"] == "mid") & (table["level"] != "total")].dropna(subset=["strain_sd"])
    if mid.empty:
        return "Components of the spread as strain-equivalent standard deviations."
    parts = []
    for generation, rows in mid.groupby("generation", sort=True):
        top = rows.iloc[int(rows["strain_sd"].to_numpy(float).argmax())]
        value = sd_words(top.to_dict(), reference.shown_factor, reference.shown_unit)
        parts.append(f"{generation}: {level_words(str(top['called']))} with {value}")
    return f"The largest component at mid range. {'; '.join(parts)}."


def shares_figure(variance: Variance) -> Figure | None:
    """Return the shares of the variance at mid range as one bar a generation."""
    table = variance.variance_in_strain
    table = table[(table["place"] == "mid") & (table["level"] != "total")].dropna(subset=["share"])
    generations = generations_of(table) if len(table) else ()
    table = table[table["generation"].isin(generations)]
    if table.empty:
        return None
    levels, words = _levels_in_order(table), _called(table)
    traces: list[Trace] = []
    labels: list[Layout] = []
    for row_index, generation in enumerate(generations):
        start, told = 0.0, len(labels)
        for level in levels:
            share = float(
                table.loc[(table["generation"] == generation) & (table["level"] == level), "share"].sum()
            )
            colour = palette.RAMP[(1 + 2 * levels.index(level)) % len(palette.RAMP)]
            text = f"{generation}: {numbers.percent(share)} of the variance: {words[level]}"
            traces.append(
                bars(
                    [row_index],
                    [share * 100],
                    across=True,
                    base=[start * 100],
                    colour=colour,
                    width=0.42,
                    text=[text],
                )
            )
            if share >= 0.08:
                side = 0.38 if len(labels) % 2 == told % 2 else -0.38  # neighbours would meet in print
                labels.append(_share_label(words[level], share, start, row_index + side))
            start += share
    ticks = [(float(i), g) for i, g in enumerate(generations)]
    return Figure(
        name="shares",
        caption=_shares_caption(table, generations),
        alternative="One bar a generation, divided by the share of each level in the variance at mid range.",
        traces=tuple(traces),
        layout=layout(
            axis("Share of the variance at mid range", "%", low=0, high=100),
            axis("", ticks=ticks, low=-0.6, high=len(generations) - 0.4, reverse=True, grid=False),
            annotations=labels,
            margin={"l": 110},
        ),
        table="variance_in_strain",
        note="Shares are of variances, not of SDs. A level that the design resolves badly has no share "
        "here; its "
        "limits stand in the figure above.",
        height=110 + 76 * len(generations),
    )


def _share_label(words: str, share: float, start: float, height: float) -> Layout:
    """Begin at the part, or end at it where that lies in the right half: a narrow page has room there."""
    begins = start < 0.5
    return label(
        f"{words} {numbers.percent(share)}",
        (start if begins else start + share) * 100,
        height,
        anchor="left" if begins else "right",
        shift=(0, 0),
        size=11,
        colour=palette.INK,
    )


def _shares_caption(table: pd.DataFrame, generations: Iterable[str]) -> str:
    parts = []
    for generation in generations:
        rows = table[table["generation"] == generation].sort_values("share", ascending=False, kind="stable")
        words = [
            f"{numbers.percent(float(r['share']))} {level_words(str(r['called']))}"
            for _, r in rows.head(3).iterrows()
        ]
        parts.append(f"{generation}: {', '.join(words)}")
    return f"Shares of the variance at mid range. {'; '.join(parts)}."


def caterpillar_figure(variance: Variance, level: str) -> Figure | None:
    """Return the effects of modules or sensors, sorted, each with its interval, one panel a term."""
    rows = variance.effects
    rows = rows[(rows["level"] == level) & rows["generation"].isin(generations_of(rows) if len(rows) else ())]
    rows = in_shown_units(rows.dropna(subset=["estimate"]))
    if rows.empty or len(rows.drop_duplicates(["module", "sensor"])) < 2:
        return None
    terms = [term for term in TERMS if term in set(rows["term"])][:2]
    generations = generations_of(rows)
    traces = [
        trace
        for i, term in enumerate(terms)
        for trace in _caterpillar(rows, term, level, generations, panel(i))
    ]
    units = {term: str(rows.loc[rows["term"] == term, "unit"].iloc[0]) for term in terms}
    number = int(rows.groupby("term")["module"].size().max())
    made = small_multiples(
        [TERM_WORDS.get(term, term) for term in terms],
        axis("Rank", low=-1, high=number, grid=False),
        axis("Effect"),
        columns=len(terms),
        gap=(0.12, 0.1),
        shapes=[level_line(0, colour=palette.INK, axes=panel(i)) for i in range(len(terms))],
    )
    for index, term in enumerate(terms):
        key = f"yaxis{panel(index)}"
        made[key] = {k: v for k, v in made[key].items() if k not in ("matches", "showticklabels")} | {
            "title": {"text": f"Effect on {TERM_WORDS.get(term, term)} / {units[term]}"}
        }
    return Figure(
        name=f"{level}-effects",
        caption=_caterpillar_caption(rows, level, terms),
        alternative=f"Effects of {level}s in order of size with 95 % intervals, panels for "
        + " and ".join(terms)
        + ", with a line at zero.",
        traces=tuple(traces),
        layout=made,
        data=rows,
        note="Best predictions by the model: drawn towards zero the less the data say of a "
        f"{'module' if level == 'module' else 'sensor'}. Each mark leads to its page.",
        height=360,
    )


def in_shown_units(rows: pd.DataFrame) -> pd.DataFrame:
    """Return effects with those in strain turned into per cent, as pages show them."""
    is_strain = rows["unit"] == "mm/mm"
    factor = is_strain.map({True: 100.0, False: 1.0})
    limits = {key: rows[key] * factor for key in ("estimate", "low", "high")}
    return rows.assign(**limits, unit=rows["unit"].where(~is_strain, "%"))


def _caterpillar(
    rows: pd.DataFrame, term: str, level: str, generations: tuple[str, ...], axes: str
) -> Iterable[Trace]:
    own = rows[rows["term"] == term].sort_values("estimate", kind="stable").reset_index(drop=True)
    for generation, part in own.groupby("generation", sort=True):
        names = [
            f"{m} {s}".strip() if level == "sensor" else str(m)
            for m, s in zip(part["module"], part["sensor"], strict=True)
        ]
        text = [
            f"{name}: {numbers.interval(float(e), float(a), float(b), str(u))}"
            for name, e, a, b, u in zip(
                names, part["estimate"], part["low"], part["high"], part["unit"], strict=True
            )
        ]
        yield intervals(
            part["estimate"],
            part["low"],
            part["high"],
            part.index.to_numpy(float),
            across=False,
            style=palette.generation_style(str(generation), generations),
            size=5,
            name=str(generation),
            text=text,
            links=[
                slugs.sensor_href(str(m), str(s)) if level == "sensor" else slugs.module_href(str(m))
                for m, s in zip(part["module"], part["sensor"], strict=True)
            ],
            axes=axes,
        )


def _caterpillar_caption(rows: pd.DataFrame, level: str, terms: list[str]) -> str:
    parts = []
    for term in terms:
        own = rows[rows["term"] == term]
        apart = int(((own["low"] > 0) | (own["high"] < 0)).sum())
        parts.append(f"{apart} of {len(own)} in the {TERM_WORDS.get(term, term)}")
    words = "modules" if level == "module" else "sensors"
    return f"{words.capitalize()} whose interval excludes the mean: {', '.join(parts)}."


def _tables(variance: Variance) -> Iterable[Table]:
    factor, unit = variance.reference.shown_factor, variance.reference.shown_unit
    generation = Column("generation", "Generation", kind="text")
    yield Table(
        "components_in_strain",
        f"Every component as strain-equivalent SD in {unit}, with its 95 % interval."
        if unit == "%"
        else f"Every component as SD in {unit}, with its 95 % interval.",
        _side_by_side(variance.variance_in_strain, factor),
        (
            generation,
            Column("words", "Component", kind="text"),
            Column("mid", "SD at mid range", unit, kind="text"),
            *_second_column(variance.variance_in_strain, unit),
            Column("share", "Share of variance", "%", kind="text"),
            Column("zero", "SD at zero", unit, kind="text"),
            Column("full", "SD at full scale", unit, kind="text"),
            Column("label", "The design says", kind="text"),
        ),
        source="variance_in_strain",
        note="Shares are of variances, at mid range. Where only limits are stated, shares are withheld.",
    )
    yield Table(
        "variance_components",
        "The components in units of the signal, with intervals and tests.",
        _with_words(variance.variance_components),
        (
            generation,
            Column("_words", "Component", kind="text"),
            Column("term", "Term", kind="text"),
            Column("estimate", "SD", interval=("low", "high")),
            Column("unit", "Unit", kind="text"),
            Column("p", "p", kind="probability", missing="not tested"),
            Column("test", "Test", kind="text"),
            Column("label", "The design says", kind="text"),
        ),
    )
    yield from _precision_and_tests(variance, generation, factor, unit)
    yield Table(
        "fixed_effects",
        "The mean line of each generation.",
        variance.fixed_effects,
        (
            generation,
            Column("term", "Coefficient", kind="text"),
            Column("estimate", "Estimate", interval=("low", "high")),
            Column("df", "Degrees of freedom", digits=3),
        ),
        shown_rows=60,
    )


def _second_column(table: pd.DataFrame, unit: str) -> Iterable[Column]:
    """The limits by modified large sample, where a balanced generation has them."""
    if table["high_modified_large_sample"].notna().any():
        yield Column(
            "modified_large_sample",
            "Limits at mid range by modified large sample",
            unit,
            kind="text",
        )


def _precision_and_tests(variance: Variance, generation: Column, factor: float, unit: str) -> Iterable[Table]:
    if len(variance.precision):
        yield Table(
            "precision",
            "Precision of measurement, and variation of the product, apart.",
            variance.precision,
            (
                generation,
                Column("figure", "Figure", kind="text"),
                Column("strain_sd", "SD at mid range", unit, factor=factor, interval=("low", "high")),
                Column("label", "The design says", kind="text"),
            ),
        )
    if len(variance.tests):
        yield Table(
            "component_tests",
            "Is a component there at all? Corrected by Holm over the components of a generation.",
            _with_words(variance.tests, "component"),
            (
                generation,
                Column("_words", "Component", kind="text"),
                Column("test", "Test", kind="text"),
                Column("p", "p", kind="probability"),
                Column("p_adjusted", "p, corrected", kind="probability"),
            ),
        )
    yield Table(
        "identifiability",
        "What the design can tell apart, by counting its degrees of freedom.",
        _with_words(variance.identifiability),
        (
            generation,
            Column("_words", "Component", kind="text"),
            Column("degrees_of_freedom", "Degrees of freedom", kind="integer"),
            Column("label", "Label", kind="text"),
            Column("reason", "Why", kind="text"),
        ),
    )
    yield Table(
        "fit_certificates",
        "The evidence that each fit ended at its optimum.",
        variance.certificate,
        (
            generation,
            Column("criterion", "−2 log restricted likelihood", digits=8),
            Column("difference", "Log-likelihood, ours less statsmodels’", digits=2, missing="not compared"),
            Column("smallest_cone_eigenvalue", "Smallest eigenvalue", digits=2, missing="none"),
            Column("evaluations", "Evaluations", kind="integer"),
            Column("restarts", "Restarts", kind="integer"),
            Column("singular", "On the boundary", kind="text"),
        ),
    )


def _side_by_side(table: pd.DataFrame, factor: float) -> pd.DataFrame:
    """Return one row a generation and component: its SD at each place, its share, its label.

    The pooled fit is profiled at mid range only, so that is all that is shown of it.
    """
    made = []
    several = table["generation"].nunique() > 1
    for (generation, level), rows in table.groupby(["generation", "level"], sort=False):
        shown = rows[rows["place"] == "mid"] if generation == "all" and several else rows
        by_place = {str(r["place"]): r for r in records_of(shown)}
        middle = by_place.get("mid", next(iter(by_place.values())))
        sds = {place: _unbroken(sd_words(row, factor)) for place, row in by_place.items()}
        made.append(
            {
                "generation": _unbroken(str(generation)),
                "words": level_words(str(middle["called"])),
                **{place: sds.get(place, "") for place in PLACES},
                "modified_large_sample": _unbroken(_second_words(middle, factor)),
                "share": "" if level == "total" else _unbroken(_share_words(middle)),
                "label": "" if pd.isna(middle["label"]) else str(middle["label"]),
            }
        )
    columns = ["generation", "words", *PLACES, "modified_large_sample", "share", "label"]
    return pd.DataFrame(made, columns=columns)


def _unbroken(text: str) -> str:
    """Return *text* so that a cell does not break it into lines; a long refusal may break."""
    return text if text == numbers.NOT_IDENTIFIABLE else text.replace(" ", "\u00a0").replace("-", "\u2011")


def _second_words(row: Mapping[Hashable, Any], factor: float) -> str:
    """The limits by modified large sample; empty where the profile has none either."""
    low, high = (float(row[f"{end}_modified_large_sample"]) * factor for end in ("low", "high"))
    if math.isnan(high):
        return "" if pd.isna(row["high"]) else "not balanced"
    return numbers.limits(low, high)


def _share_words(row: Mapping[Hashable, Any]) -> str:
    if pd.isna(row["share"]):
        return "withheld"
    return numbers.interval(row["share"] * 100, row["share_low"] * 100, row["share_high"] * 100)


def _with_words(frame: pd.DataFrame, column: str = "called") -> pd.DataFrame:
    return frame.assign(_words=[level_words(str(v)) for v in frame[column]])
