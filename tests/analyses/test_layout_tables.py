"""What pages list of placements: tests counted together, chance said, shapes ready to be drawn, findings."""

from __future__ import annotations

import math
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.analyses.layout_findings import layout_facts, layout_findings
from campaign.analyses.layout_results import (
    DETECTED,
    GENERATION_LINE,
    NO_BLUNDER,
    NO_TEST,
    ONE_EDGE,
    OWN_LINE,
    Layout,
)
from campaign.analyses.layout_tables import (
    PLACEMENT_COLUMNS,
    RISK,
    amplification_facts,
    bad_lengths,
    chance_of_tests,
    length_table,
    node_table,
    placement_table,
    unsolved,
)
from campaign.analyses.layout_views import BY_DATUM, BY_FIT, shape_view
from tests.analyses.layout_campaign import SEATED, laid

NO_LIMITS = SimpleNamespace(
    table=pd.DataFrame({"limit": [], "value": [], "verdict": []}),
    of_new_sensors=lambda: pd.DataFrame({"limit": [], "verdict": []}),
)


def row_of(table: pd.DataFrame, module: str, name: str, line: str = OWN_LINE) -> pd.Series:
    found = table[(table["module"] == module) & (table["placement"] == name) & (table["read_by"] == line)]
    return found.iloc[0]


def test_every_placement_has_its_row_and_tests_are_counted_line_by_line() -> None:
    layout = laid().layout
    table = placement_table(layout)
    assert tuple(table.columns) == PLACEMENT_COLUMNS
    assert len(table) == len(layout.placements)
    for line in (OWN_LINE, GENERATION_LINE):
        rows = table[table["read_by"] == line].sort_values("p")
        smallest = rows.iloc[0]
        assert smallest["p_adjusted"] == pytest.approx(min(1.0, len(rows) * smallest["p"]))
        assert rows["p_adjusted"].is_monotonic_increasing
        assert (rows["p_adjusted"] >= rows["p"]).all()


def test_a_slip_stays_beyond_doubt_and_chance_does_not() -> None:
    slipped = placement_table(laid().with_signals(-9.0, "AC", "2"))
    chance = chance_of_tests(slipped, OWN_LINE)
    assert chance is not None
    assert (chance.tested, chance.expected) == (16, pytest.approx(0.8))
    assert chance.beyond_doubt == 1
    low, high = stats.binom.ppf([0.025, 0.975], 16, 0.05)
    assert (chance.low, chance.high) == (low, high)
    [only] = bad_lengths(slipped, OWN_LINE).to_dict("records")
    assert (only["module"], only["placement"], only["verdict"]) == ("M01", "2", DETECTED)
    # the same table with its p-values at the edge: beyond their own limit, and no finding
    edge = slipped.assign(p=0.04, p_adjusted=1.0)
    at_edge = chance_of_tests(edge, OWN_LINE)
    assert at_edge is not None
    assert (at_edge.beyond, at_edge.beyond_doubt) == (16, 0)
    assert at_edge.crowded == {"M01": 4, "M02": 4, "M03": 4, "M04": 4}
    assert bad_lengths(edge, OWN_LINE).empty


def test_a_named_edge_and_its_error_stand_in_its_row() -> None:
    table = placement_table(laid("braced", 2).with_signals(-7.0, "QS", "2"))
    row = row_of(table, "M01", "2")
    assert row["network_redundancy"] == 3
    assert row["verdict"] == ONE_EDGE or row["suspected"].startswith("QS")
    assert row["p_adjusted"] < RISK
    assert abs(row["error_mm"] + 7.0) < row["expanded_uncertainty_mm"] + 0.5


def test_what_is_not_tested_or_not_solved_is_said_and_counts_in_no_test() -> None:
    case = laid()
    kept = {k: f for k, f in case.features.items() if (f.identity.module, f.identity.sensor) != ("M01", "CD")}
    table = placement_table(case.again(kept))
    rows = table[(table["module"] == "M01") & (table["read_by"] == OWN_LINE)]
    assert set(rows["verdict"]) == {NO_TEST}
    assert rows["p"].isna().all()
    chance = chance_of_tests(table, OWN_LINE)
    assert chance is not None
    assert chance.tested == 12
    assert unsolved(table, OWN_LINE) == [("M01", "solved", "CD: no signal", ["1", "2", "3", "4"])]
    few = {k: f for k, f in case.features.items() if f.identity.sensor in ("AB", "CD", "AC")}
    none = placement_table(case.again(few))
    assert chance_of_tests(none, OWN_LINE) is None
    assert set(none["verdict"]) == {""}


def test_nodes_and_lengths_sum_up_to_the_errors_of_the_whole() -> None:
    layout = laid(seat_mm=SEATED).layout
    nodes = node_table(layout.nodes)
    own = nodes[nodes["read_by"] == OWN_LINE]
    assert len(own) == 16
    assert set(own["placements"]) == {4}
    whole = layout.errors[
        (layout.errors["read_by"] == OWN_LINE) & (layout.errors["figure"] == "node error after best fit")
    ].iloc[0]
    assert np.sqrt(np.mean(own["observed_mm"] ** 2)) == pytest.approx(whole["rms_mm"])
    assert np.sqrt(np.mean(own["predicted_mm"] ** 2)) == pytest.approx(whole["predicted_rms_mm"], rel=0.05)
    lengths = length_table(layout.edges)
    mine = lengths[(lengths["read_by"] == OWN_LINE) & (lengths["module"] == "M02")]
    assert sorted(mine["sensor"]) == ["AB", "AC", "AD", "BC", "BD", "CD"]
    p = next(p for p in layout.placements if (p.module, p.name, p.line) == ("M02", "1", OWN_LINE))
    off = [
        (q.lengths_mm - q.known_lengths_mm)[0]
        for q in layout.of_line(OWN_LINE)
        if (q.module, q.trial) == (p.module, p.trial)
    ]
    first = mine[mine["sensor"] == p.edges[0].sensor].iloc[0]
    assert first["observed_mm"] == pytest.approx(np.sqrt(np.mean(np.square(off))))


def test_views_keep_the_datum_and_fit_without_it() -> None:
    p = laid().layout.of_line(OWN_LINE)[0]
    datum, fit = shape_view(p, BY_DATUM), shape_view(p, BY_FIT)
    assert datum.errors_mm[0] == pytest.approx(0.0)
    assert datum.errors_mm[1, 1] == pytest.approx(0.0)
    assert np.nansum(fit.errors_mm, axis=0) == pytest.approx(0.0, abs=1e-9)
    assert np.nansum(fit.errors_mm**2) <= np.nansum(datum.errors_mm**2)
    assert datum.rebuilt_mm == pytest.approx(p.adjusted_mm)
    assert datum.ellipses.semi_major_mm[0] == pytest.approx(0.0)
    assert (fit.ellipses.semi_major_mm > 0).all()
    outlines = fit.outlines(40)
    assert outlines[:, 0] == pytest.approx(outlines[:, -1])
    reach = np.linalg.norm(outlines, axis=2).max(axis=1)
    # 40 points come within 0.3 % of the end of the major axis
    assert reach == pytest.approx(fit.ellipses.factor_95 * fit.ellipses.semi_major_mm, rel=4e-3)


def test_drawn_ellipses_hold_the_differences_at_their_level() -> None:
    inside = total = 0
    for seed in (1, 2, 3):
        for p in laid(seed=seed).layout.of_line(OWN_LINE):
            view = shape_view(p, BY_FIT)
            found = p.after_fit
            assert found is not None
            for k in range(4):
                cosine, sine = math.cos(view.ellipses.angle_rad[k]), math.sin(view.ellipses.angle_rad[k])
                along = view.errors_mm[k] @ [cosine, sine] / view.ellipses.semi_major_mm[k]
                across = view.errors_mm[k] @ [-sine, cosine] / view.ellipses.semi_minor_mm[k]
                inside += math.hypot(along, across) <= view.ellipses.factor_95
                total += 1
    # placements of a module share lines and runs: the limits are those of one placement a module
    low, high = stats.binom.ppf([0.001, 0.999], 12, 0.95) / 12
    assert total == 192
    assert low <= inside / total <= high


def test_amplification_is_told_with_and_without_all_edges() -> None:
    case = laid()
    [whole] = amplification_facts(case.layout)
    assert (whole.nodes, whole.edges, whole.redundancy, whole.short) == (4, 6, 1, 0)
    assert math.isnan(whole.short_low)
    assert 0 < whole.low <= whole.high <= whole.largest
    kept = {k: f for k, f in case.features.items() if (f.identity.module, f.identity.sensor) != ("M01", "CD")}
    [fact] = amplification_facts(case.again(kept))
    assert fact.short == 4
    assert fact.short_low > fact.measured_high


# ---------------------------------------------------------------- findings


def facts_of(layout: Layout):
    [fact] = layout_facts(layout, NO_LIMITS)  # type: ignore[arg-type]
    return fact


def test_findings_say_errors_beside_predictions_and_the_extra_sd_only_where_it_is_told() -> None:
    plain, seated = facts_of(laid().layout), facts_of(laid(seat_mm=SEATED).layout)
    assert (plain.modules, plain.placements) == (4, 16)
    assert set(plain.own) == set(plain.mean_line) == {"datum", "fit", "edges"}
    assert plain.own["fit"].as_predicted
    assert not plain.own_extra.told
    assert seated.own_extra.told
    assert seated.own_extra.low <= SEATED <= seated.own_extra.high
    assert seated.own["fit"].ratio_low > 1
    assert plain.bad == seated.bad == () or all(one.p < 0.05 / 16 for one in (*plain.bad, *seated.bad))


def test_a_bad_length_is_a_fact_and_the_error_without_it_stands_beside() -> None:
    fact = facts_of(laid().with_signals(-9.0, "AC", "2"))
    assert [(one.module, one.placement, one.sensors) for one in fact.bad] == [("M01", "2", ())]
    assert fact.own_extra.left_out == 1
    observed, predicted = fact.fit_without_bad
    assert observed < fact.own["fit"].rms
    assert observed == pytest.approx(facts_of(laid().layout).own["fit"].rms, rel=0.2)
    assert 0.5 < observed / predicted < 1.6


def test_there_is_a_finding_only_where_an_error_is_known() -> None:
    layout = laid().layout
    [finding] = layout_findings(layout, NO_LIMITS)  # type: ignore[arg-type]
    assert (finding.kind, finding.verdict, finding.limit) == ("layout", "", "node_error")
    assert layout_findings(None, NO_LIMITS) == ()  # type: ignore[arg-type]
    unknown = replace(layout, errors=layout.errors.iloc[:0])
    assert layout_findings(unknown, NO_LIMITS) == ()  # type: ignore[arg-type]
    assert NO_BLUNDER in set(placement_table(layout)["verdict"])
