"""Generations compared: truth recovered, words that claim only what is shown, what hinders a comparison."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from benchmarks.generations import alike
from campaign.analyses.generation_design import confounded_within, order_of_generations
from campaign.analyses.generation_figures import (
    FULL_SCALE,
    RANGE,
    VALUE_COLUMNS,
    Comparable,
    Spread,
    noise_of,
)
from campaign.analyses.generation_findings import generation_findings
from campaign.analyses.generations import (
    GENERATION_COLUMNS,
    Source,
    compare_generations,
    holm,
    pairs_of,
)
from campaign.methods.variance_ratios import VarianceInterval
from campaign.recordings.description import Description
from tests.pages.small_campaign import Sketch, small_results

NAN = math.nan


def values(
    figure: str,
    generation: str,
    mean: float,
    *,
    modules: int = 6,
    sensors: int = 4,
    module_sd: float = 0.1,
    unit: str = "%FSO",
    seed: int = 1,
    batches: int = 0,
    positions: tuple[str, ...] = ("AB", "BC", "CD", "DA"),
) -> pd.DataFrame:
    """Values of one figure of one generation: modules and sensors drawn about *mean*."""
    rng = np.random.default_rng([seed, sum(map(ord, figure + generation))])
    module = np.repeat(np.arange(modules), sensors)
    drawn = mean + rng.normal(0, module_sd, modules)[module] + rng.normal(0, 0.05, modules * sensors)
    return pd.DataFrame(
        {
            "figure": figure,
            "unit": unit,
            "generation": generation,
            "batch": [f"B{m % batches}" if batches else "" for m in module],
            "module": [f"{generation}{m}" for m in module],
            "sensor": np.tile(np.array(positions[:sensors]), modules),
            "position": np.tile(np.array(positions[:sensors]), modules),
            "value": drawn,
        },
        columns=list(VALUE_COLUMNS),
    )


def offer(*frames: pd.DataFrame, spreads: tuple[Spread, ...] = (), **conditions: float) -> Comparable:
    table = pd.concat(frames, ignore_index=True)
    counts = table.drop_duplicates(["generation", "module"])["generation"].value_counts()
    held = {FULL_SCALE: 0.4, RANGE: 0.4} | {k.replace("_", " "): v for k, v in conditions.items()}
    return Comparable("mm/mm", table, spreads, held, {str(k): int(v) for k, v in counts.items()})


def compared(*offers: Comparable, margins: dict[str, tuple[float, str]] | None = None, order=("old", "new")):
    sources = [Source(f"campaign {i}", one) for i, one in enumerate(offers)]
    made = compare_generations(Description("t", margins=margins or {}), sources, order)
    assert made is not None
    return made


def row(made, figure, first="old", second="new"):
    table = made.table
    found = table[(table["figure"] == figure) & (table["first"] == first) & (table["second"] == second)]
    assert len(found) == 1
    return found.iloc[0]


def test_a_clear_difference_is_better_in_its_unit_and_a_neutral_one_only_larger():
    made = compared(
        offer(
            values("linearity", "old", 2.0),
            values("linearity", "new", 1.0),
            values("slope", "old", 50.0, unit="pF/(mm/mm)"),
            values("slope", "new", 60.0, unit="pF/(mm/mm)"),
        )
    )
    assert tuple(made.table.columns) == GENERATION_COLUMNS
    line, slope = row(made, "linearity"), row(made, "slope")
    assert line["verdict"] == "better"
    assert line["low"] < line["difference_or_ratio"] < line["high"] < 0
    assert line["difference_or_ratio"] == pytest.approx(-1.0, abs=0.2)
    assert line["df"] <= 10
    assert (slope["verdict"], slope["kind"]) == ("larger", "ratio")
    assert slope["low"] <= 1.2 <= slope["high"]
    assert line["p_adjusted"] == pytest.approx(min(2 * min(line["p"], slope["p"]), 1), rel=1e-9) or (
        line["p_adjusted"] >= line["p"]
    )


def test_two_modules_give_estimates_and_no_verdict():
    made = compared(offer(values("linearity", "old", 2.0, modules=2), values("linearity", "new", 1.0)))
    found = row(made, "linearity")
    assert found["verdict"] == "too few modules"
    assert math.isnan(found["p"])
    assert math.isnan(found["p_adjusted"])
    assert found["estimate_first"] == pytest.approx(2.0, abs=0.3)
    fact = generation_findings(made)[0].facts[0]
    assert fact.few
    assert not fact.better


def test_a_small_difference_is_equivalent_only_with_a_margin_and_within_it():
    frames = [values("linearity", name, 1.0, module_sd=0.02, modules=8) for name in ("old", "new")]
    assert row(compared(offer(*frames)), "linearity")["verdict"] == "not decided"
    within = compared(offer(*frames), margins={"linearity": (0.2, "%FSO")})
    assert row(within, "linearity")["verdict"] == "equivalent"
    narrow = compared(offer(*frames), margins={"linearity": (0.001, "%FSO")})
    assert row(narrow, "linearity")["verdict"] == "not decided"


def test_a_margin_in_per_cent_makes_the_comparison_a_ratio():
    frames = [values("linearity", name, 1.0, module_sd=0.02, modules=8) for name in ("old", "new")]
    found = row(compared(offer(*frames), margins={"linearity": (0.2, "1")}), "linearity")
    assert (found["kind"], found["verdict"]) == ("ratio", "equivalent")


def test_margins_that_serve_nothing_are_noticed():
    frames = [values("linearity", name, 1.0) for name in ("old", "new")]
    margins = {"linearity": (0.2, "mm"), "liniarity": (0.1, "1"), "drift_1h": (0.1, "%FSO")}
    notices = compared(offer(*frames), margins=margins).notices
    assert [n.code for n in notices] == ["margin-not-used"] * 3
    assert ["does not fit" in n.what for n in notices] == [True, False, False]


def test_two_positions_that_only_one_has_take_no_part():
    one = values("linearity", "old", 1.0)
    other = values("linearity", "new", 1.0, positions=("AB", "BC", "XX", "YY"))
    other.loc[other["position"].isin(["XX", "YY"]), "value"] += 50.0
    made = compared(offer(one, other))
    found = row(made, "linearity")
    assert found["estimate_second"] == pytest.approx(1.0, abs=0.3)
    assert made.modules["value"].max() < 2.0
    assert (found["sensors_second"], found["label"]) == (12, "at common positions")
    apart = compared(offer(one, values("linearity", "new", 1.0, positions=("P", "Q", "R", "S"))))
    assert row(apart, "linearity")["label"] == "their sensors share no position"


def test_batches_are_a_level_above_modules_from_three_in_each_generation_on():
    def freedom(batches: int) -> float:
        frames = [values("linearity", name, 1.0, modules=9, batches=batches) for name in ("old", "new")]
        for frame in frames:
            frame["value"] += frame["batch"].map({f"B{k}": 0.5 * k for k in range(3)}).fillna(0.0)
        return float(row(compared(offer(*frames)), "linearity")["df"])

    assert freedom(3) <= 4.0 < freedom(2)


def test_spreads_are_compared_by_their_ratio_and_decide_with_enough_modules():
    def spread(generation: str, sd: float, low: float, high: float) -> Spread:
        return Spread(generation, "sensor", "sensor", VarianceInterval(sd**2, low**2, high**2))

    spreads = (spread("old", 0.03, 0.025, 0.038), spread("new", 0.015, 0.012, 0.019))
    frames = [values("slope", name, 50.0, unit="pF/(mm/mm)") for name in ("old", "new")]
    found = row(compared(offer(*frames, spreads=spreads)), "sd_sensor")
    assert found["difference_or_ratio"] == pytest.approx(0.5)
    assert found["low"] < 0.5 < found["high"] < 1
    assert found["verdict"] == "better"
    zero = (spread("old", 0.0, 0.0, 0.01), spread("new", 0.015, 0.012, 0.019))
    none = row(compared(offer(*frames, spreads=zero)), "sd_sensor")
    assert none["verdict"] == "not decided"
    assert "zero" in none["label"]


def test_other_units_and_ranges_are_mismatches_that_are_said_and_not_compared():
    old = offer(values("slope", "old", 50.0, unit="Ω/(mm/mm)"), values("linearity", "old", 1.0))
    new = offer(
        values("slope", "new", 50.0, unit="pF/(mm/mm)"),
        values("linearity", "new", 1.0),
        values("pressure_sensitivity", "new", 1e-3, unit="mm/mm per kPa"),
        highest_calibrated_level=0.3,
    )
    made = compare_generations(Description("t"), [Source("a", old), Source("b", new)], ("old", "new"))
    assert made is not None
    assert made.table.empty
    assert {(f, r.split(":")[0]) for f, _, _, r in made.not_compared} == {
        ("slope", "units differ"),
        ("linearity", "highest calibrated level differs"),
    }
    said = " ".join(n.what + n.done for n in made.notices)
    assert "pressure sensitivity" in said
    assert all(n.code == "earlier-differs" for n in made.notices)


def test_per_cent_of_another_full_scale_is_referred_to_that_of_the_newer():
    old = offer(values("repeatability", "old", 1.0, module_sd=0.01), full_scale=0.2)
    new = offer(values("repeatability", "new", 1.0, module_sd=0.01))
    found = row(compared(old, new), "repeatability")
    assert found["estimate_first"] == pytest.approx(0.5, abs=0.05)  # half as much of twice the full scale
    assert found["verdict"] == "worse"


def test_pairs_lead_with_the_newest_and_beyond_four_hold_nothing_else():
    assert pairs_of(["a", "b", "c"]) == [("b", "c"), ("a", "c"), ("a", "b")]
    assert pairs_of(list("abcdef")) == [(name, "f") for name in "edcba"]


def test_holm_as_published():
    # Holm (1979): the smallest p times the number of tests, the next times one less, never falling
    assert holm([0.01, NAN, 0.04, 0.03]) == pytest.approx([0.03, NAN, 0.06, 0.06], nan_ok=True)


def test_alike_generations_rarely_yield_a_verdict_and_no_figure_rejects_more_often_than_it_may():
    number, small = 30, {"sensors": 2, "sessions": 0, "levels": 4}
    made = [alike(seed, (small, small), with_spreads=False) for seed in range(number)]
    table = pd.concat([one.table for one in made])
    # binomial, 30 trials at 5 %: more than 5 has a probability of 0.003, more than 6 one of 0.0006
    assert sum(len(one.decided) > 0 for one in made) <= 5
    rejected = table["p"].lt(0.05).groupby(table["figure"]).sum()
    assert rejected.max() <= 6
    tested = table["p"].notna().groupby(table["figure"]).sum()
    assert {name for name in tested.index if tested[name] == number} >= {
        "slope",
        "zero_signal",
        "gauge_factor",
    }
    assert tested["strain_error"] == 0


def test_more_runs_of_alike_modules_are_no_improvement():
    few, many = (
        {"modules": 6, "sessions": 0, "repetitions": 2},
        {"modules": 6, "sessions": 0, "repetitions": 8},
    )
    made = [alike(seed, (few, many), with_spreads=False) for seed in range(3)]
    table = pd.concat([one.table for one in made]).set_index("figure")
    # SDs of two runs come out smaller on average than those of eight: as if more runs repeated worse
    assert (
        table.loc["repeatability", "estimate_second"] > table.loc["repeatability", "estimate_first"]
    ).any()
    assert table.loc["repeatability", "verdict"].eq("not tested").sum() >= 2
    assert table.loc["repeatability", "label"].str.startswith("noise").sum() >= 2
    assert table.loc["slope", "verdict"].ne("not tested").all()


def test_figures_of_pooled_components_are_estimates_without_a_test_or_a_margin():
    frames = [values("strain_error", n, m, unit="mm/mm") for n, m in (("old", 2.0), ("new", 1.0))]
    made = compared(offer(*frames), margins={"strain_error": (0.5, "mm/mm")})
    found = row(made, "strain_error")
    assert found["verdict"] == "not tested"
    assert found["label"] == "its uncertainty is common to the generation"
    assert found["difference_or_ratio"] == pytest.approx(-1.0, abs=0.2)
    assert all(math.isnan(found[name]) for name in ("low", "high", "df", "p", "p_adjusted", "margin"))
    assert ["without a test" in n.what for n in made.notices] == [True]
    assert made.decided.empty
    assert [r["figure"] for r in generation_findings(made)[0].facts[0].untested] == ["strain_error"]


def test_noise_that_may_be_all_of_the_difference_leaves_none_and_a_larger_difference_is_tested():
    def compared_with(noise_of_old: float, old: float = 2.3):
        frames = [values("linearity", n, m) for n, m in (("old", old), ("new", 1.8))]
        frames[0]["noise"], frames[1]["noise"] = noise_of_old, 0.1
        return row(compared(offer(*frames)), "linearity")["verdict"]

    assert compared_with(0.1) == "better"
    assert compared_with(1.0) == "not tested"
    assert compared_with(1.0, old=4.0) == "better"


def test_few_degrees_of_freedom_make_an_sd_too_small_as_published():
    # c4 for samples of 2, 5 and 10 (1, 4 and 9 degrees of freedom): Montgomery, Introduction to Statistical
    # Quality Control, appendix VI: 0.7979, 0.9400, 0.9727
    figures = pd.DataFrame(
        {
            "estimate": 1.0,
            "degrees_of_freedom": [1.0, 4.0, 9.0],
            "kind": "spread",
            "standard_uncertainty": NAN,
        }
    )
    c4 = np.sqrt(1.0 - noise_of(figures) ** 2)
    assert c4.to_numpy() == pytest.approx([0.7979, 0.9400, 0.9727], abs=6e-5)
    magnitude = figures.assign(kind="estimate", standard_uncertainty=0.3)
    assert noise_of(magnitude).tolist() == [0.3] * 3


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    return small_results(tmp_path_factory.mktemp("generations") / "small", Sketch())


def test_a_campaign_read_from_disk_is_compared_and_its_sisters_do_not_differ(results):
    made = results.generations
    assert made is not None
    assert made.names == ("first", "second")
    assert {"linearity", "slope", "gauge_factor", "repeatability", "strain_error", "sd_session"} <= set(
        made.table["figure"]
    )
    assert len(made.decided) <= 1
    assert any(finding.kind == "generations" for finding in results.findings.findings)


def test_what_differs_with_the_generation_is_named(results):
    found = confounded_within(results.intake, ("first", "second"))
    assert [(c.what, c.of_first) for c in found] == [("batch", "not recorded")]
    trials = results.intake.trials.copy()
    trials["started"] = np.where(trials["generation"] == "first", "2025-01-02T10:00", "2025-03-01T10:00")
    dated = replace(results.intake, trials=trials)
    assert "date" in {c.what for c in confounded_within(dated, ("first", "second"))}


def test_order_is_by_day_built_else_by_first_start_else_by_name(results):
    intake = results.intake
    assert order_of_generations(intake) == ("first", "second")
    trials = intake.trials.copy()
    trials["started"] = np.where(trials["generation"] == "first", "2025-03-01T10:00", "2025-01-02T10:00")
    started = replace(intake, trials=trials)
    assert order_of_generations(started) == ("second", "first")
    modules = intake.modules.copy()
    modules["built"] = np.where(modules["generation"] == "first", "2024-01-01", "2024-02-01")
    assert order_of_generations(replace(started, modules=modules)) == ("first", "second")
