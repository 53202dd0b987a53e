"""Layout: shapes come back within their ellipses, missing spread is found, and what fails is said."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.analyses.layout import analyse_layout
from campaign.analyses.layout_errors import LengthsOfPlacement
from campaign.analyses.layout_lengths import SharedPart
from campaign.analyses.layout_maps import DETECTABLE, JUST, NAMEABLE, UNDER, facts_of
from campaign.analyses.layout_results import (
    DETECTED,
    EDGE_COLUMNS,
    GENERATION_LINE,
    GROUP,
    NO_TEST,
    NODE_COLUMNS,
    NOT_SOLVED,
    ONE_EDGE,
    OWN_LINE,
    PARTLY_SOLVED,
    SOLVED,
    Layout,
    Placement,
)
from campaign.analyses.layout_shapes import adjust_placement
from campaign.analyses.layout_signals import PlacedShape, network_of
from campaign.analyses.layout_summaries import AFTER_FIT, NOT_FROM_ZERO
from campaign.analyses.limits import judge_limits
from campaign.methods.distance_network import distances
from campaign.notices import NOTICE_CODES
from campaign.pages.contract_columns import CONTRACT_COLUMNS, describe_column
from campaign.pages.tables import csv_bytes
from campaign.recordings.description import Geometry
from tests.analyses.layout_campaign import NODE, PANEL, SEATED, laid, without_nan


def of(layout: Layout, module: str, name: str, line: str = OWN_LINE) -> Placement:
    return next(p for p in layout.placements if (p.module, p.name, p.line) == (module, name, line))


def codes(layout: Layout) -> set[str]:
    found = {notice.code for notice in layout.notices}
    assert found <= set(NOTICE_CODES)
    return found


def errors_of(layout: Layout, line: str = OWN_LINE, figure: str = AFTER_FIT) -> pd.Series:
    table = layout.errors
    return table[(table["read_by"] == line) & (table["figure"] == figure)].iloc[0]


# ---------------------------------------------------------------- truth


def test_shapes_are_as_far_off_as_calibration_predicts() -> None:
    layout = laid().layout
    assert [p.status for p in layout.placements] == [SOLVED] * (4 * 4 * 2)
    assert layout.notices == ()
    assert layout.errors.groupby("read_by")["placements"].unique().map(list).to_dict() == {
        OWN_LINE: [16],
        GENERATION_LINE: [16],
    }
    assert layout.errors["as_predicted"].all()
    assert layout.errors["ratio"].between(0.5, 1.6).all()
    own, mean = errors_of(layout), errors_of(layout, GENERATION_LINE)
    assert own["predicted_rms_mm"] < 0.5 * mean["predicted_rms_mm"]
    assert own["rms_mm"] < 0.5 * mean["rms_mm"]
    assert (layout.extra["label"] == NOT_FROM_ZERO).all()


def test_standardised_node_errors_lie_in_their_ellipses() -> None:
    inside = total = 0
    for seed in (1, 2, 3):
        for p in laid(seed=seed).layout.of_line(OWN_LINE):
            assert p.after_datum is not None
            for node in (2, 3):
                at = slice(2 * node, 2 * node + 2)
                error, block = p.after_datum.errors_mm[node], p.after_datum.covariance_mm2[at, at]
                inside += float(error @ np.linalg.solve(block, error)) <= stats.chi2.ppf(0.95, 2)
                total += 1
    # placements of a module share lines and runs: the limits are those of one placement a module
    low, high = stats.binom.ppf([0.001, 0.999], 12, 0.95) / 12
    assert total == 96
    assert low <= inside / total <= high


def test_the_extra_sd_of_seating_comes_back() -> None:
    found = laid(seat_mm=SEATED).layout
    extra = found.extra.set_index("read_by")
    for line in (OWN_LINE, GENERATION_LINE):
        row = extra.loc[line]
        assert row["low_mm"] <= SEATED <= row["high_mm"]
        assert row["low_mm"] > 0.5 * SEATED
        assert row["p"] < 1e-3
    own = errors_of(found)
    assert own["ratio_low"] > 1.0
    assert not own["as_predicted"]


def test_sums_of_edges_have_the_spread_that_the_whole_covariance_says() -> None:
    for line in (OWN_LINE, GENERATION_LINE):
        sums = laid().layout.sums
        sums = sums[sums["read_by"] == line]
        # 1,000 draws: a relative SD of 0.022
        assert sums["sd_monte_carlo_mm"].to_numpy() == pytest.approx(sums["sd_mm"].to_numpy(), rel=0.09)
        known = NODE * np.sqrt(12.0)
        standardised = (sums["estimate_mm"] - sums["known_mm"]) / np.hypot(sums["sd_mm"], known)
        assert 0.3 < np.sqrt(np.mean(standardised**2)) < 1.9
    # edges of one module share its part of the generation's line: taken as independent they err too little
    assert (sums["sd_mm"] > 1.2 * sums["sd_independent_mm"]).all()


# ---------------------------------------------------------------- covariance of lengths


def correlations(p: Placement) -> np.ndarray:
    sds = np.sqrt(np.diag(p.length_covariance_mm2))
    return p.length_covariance_mm2 / np.outer(sds, sds)


def test_lengths_of_one_module_err_together_by_what_they_share() -> None:
    alone, together = laid().layout, laid(shared=True).layout
    off = ~np.eye(6, dtype=bool)
    by_mean = correlations(of(alone, "M01", "1", GENERATION_LINE))[off]
    by_own = correlations(of(alone, "M01", "1"))[off]
    by_run = correlations(of(together, "M01", "1"))[off]
    assert by_mean.min() > 0.05
    assert 0.0 < by_own.max() < 0.2  # the reference alone
    assert by_run.min() > 0.3  # runs that carried all sensors
    assert "shared_parts" in together.labels
    assert "shared_parts" not in alone.labels
    assert errors_of(together)["as_predicted"]


def test_every_covariance_is_one() -> None:
    for layout in (laid().layout, laid(shared=True).layout):
        for p in layout.placements:
            assert np.linalg.eigvalsh(p.length_covariance_mm2).min() > 0
            assert np.linalg.eigvalsh(p.covariance_mm2).min() > -1e-9
            assert p.length_covariance_mm2 == pytest.approx(p.length_covariance_mm2.T)


def test_a_shared_part_adds_only_where_it_is_shared() -> None:
    factors = np.array([[1.0], [2.0], [3.0]])
    shared = SharedPart("run", factors, np.array([0, 0, 1])).covariance()
    assert shared == pytest.approx(np.array([[1.0, 2.0, 0.0], [2.0, 4.0, 0.0], [0.0, 0.0, 9.0]]))
    assert SharedPart("noise", factors).covariance() == pytest.approx(np.diag([1.0, 4.0, 9.0]))


def test_known_positions_without_an_uncertainty_are_taken_as_exact_and_said_to_be() -> None:
    case = laid()
    exact = case.again(description=replace(case.description, node_reference_mm=float("nan")))
    assert "known_nodes" in exact.labels
    assert "known_nodes" not in case.layout.labels
    assert errors_of(exact)["predicted_rms_mm"] < errors_of(case.layout)["predicted_rms_mm"]
    assert errors_of(exact)["rms_mm"] == pytest.approx(errors_of(case.layout)["rms_mm"])


def test_the_same_signals_give_the_same_result() -> None:
    one, other = laid().layout, laid().again()
    pd.testing.assert_frame_equal(one.nodes, other.nodes)
    pd.testing.assert_frame_equal(one.errors, other.errors)
    pd.testing.assert_frame_equal(one.figures, other.figures)


# ---------------------------------------------------------------- blunders


def test_a_slip_on_four_nodes_is_detected_and_no_edge_is_named() -> None:
    p = of(laid().with_signals(-9.0, "AC", "2"), "M01", "2")
    assert p.tests is not None
    assert p.tests.degrees_of_freedom == 1
    assert p.tests.p < 1e-6
    assert p.tests.blunder.verdict == DETECTED
    assert p.tests.blunder.sensors == ()
    assert np.abs(p.tests.tau) == pytest.approx(1.0)


def test_a_slip_on_a_braced_panel_is_located() -> None:
    p = of(laid("braced", 2).with_signals(-7.0, "QS", "2"), "M01", "2")
    assert p.tests is not None
    assert p.tests.degrees_of_freedom == 3
    assert p.tests.blunder.verdict in (ONE_EDGE, GROUP)
    assert p.tests.blunder.sensors[0] == "QS"
    assert abs(p.tests.blunder.error_mm + 7.0) < p.tests.blunder.uncertainty_mm + 0.5
    others = [o for o in laid("braced", 2).layout.of_line(OWN_LINE) if o.tests is not None]
    named = sum(o.tests.blunder.sensors != () for o in others if o.tests is not None)
    assert named <= 2


def test_a_gross_error_is_left_out_of_the_extra_sd_and_counted() -> None:
    plain, slipped = laid().layout, laid().with_signals(-9.0, "AC", "2")
    row = slipped.extra.set_index("read_by").loc[OWN_LINE]
    assert "1 lengths beyond chance left out" in row["label"]
    assert row["lengths"] == plain.extra["lengths"].iloc[0] - 1
    assert row["high_mm"] == pytest.approx(plain.extra.set_index("read_by").loc[OWN_LINE, "high_mm"], abs=0.1)


# ---------------------------------------------------------------- what fails


def test_a_dead_sensor_leaves_a_just_determined_shape_without_a_test() -> None:
    case = laid()
    kept = {k: f for k, f in case.features.items() if (f.identity.module, f.identity.sensor) != ("M01", "CD")}
    layout = case.again(kept)
    p = of(layout, "M01", "1")
    assert (p.status, p.reason) == (SOLVED, "CD: no signal")
    assert p.tests is not None
    assert p.tests.blunder.verdict == NO_TEST
    assert np.isnan(p.lengths_mm[[e.sensor for e in p.edges].index("CD")])
    assert np.isfinite(p.adjusted_lengths_mm).all()
    assert codes(layout) == {"placement-in-part"}
    assert sum("CD: no signal" in notice.what for notice in layout.notices) == 4


def test_a_node_that_nothing_holds_is_left_and_the_rest_solved() -> None:
    case = laid()
    dead = {("M01", "CD"), ("M01", "AD")}
    kept = {k: f for k, f in case.features.items() if (f.identity.module, f.identity.sensor) not in dead}
    p = of(case.again(kept), "M01", "1")
    assert p.status == PARTLY_SOLVED
    assert "nothing holds D in place" in p.reason
    assert p.solved.tolist() == [True, True, True, False]
    assert np.isnan(p.adjusted_mm[3]).all()
    assert np.isfinite(p.adjusted_mm[:3]).all()
    assert p.after_fit is not None
    assert p.after_fit.rms_mm < 2.0
    assert np.isfinite(p.lengths_mm).sum() == 4


def test_without_the_datum_s_node_the_part_has_a_datum_of_its_own() -> None:
    case = laid()
    dead = {("M01", "AB"), ("M01", "AC")}
    kept = {k: f for k, f in case.features.items() if (f.identity.module, f.identity.sensor) not in dead}
    p = of(case.again(kept), "M01", "1")
    assert p.status == PARTLY_SOLVED
    assert p.datum == ("B", "C")
    assert p.adjusted_mm[1] == pytest.approx(0.0)
    assert p.after_datum is not None
    assert p.after_datum.largest_mm < 3.0


def test_too_few_lengths_solve_nothing_and_say_so() -> None:
    case = laid()
    kept = {k: f for k, f in case.features.items() if f.identity.sensor in ("AB", "CD", "AC")}
    layout = case.again(kept)
    assert {p.status for p in layout.placements} == {NOT_SOLVED}
    assert all("hold no three nodes together" in p.reason for p in layout.placements)
    assert layout.errors.empty
    assert layout.figures.empty
    assert len(layout.nodes) == 32 * 4
    p = of(layout, "M01", "1")
    assert p.edge_errors_mm[[e.sensor for e in p.edges].index("AB")] == pytest.approx(0.0, abs=3.0)


def test_a_length_outside_calibration_is_not_used() -> None:
    layout = laid().with_signals(60.0, "AB", "1")
    p = of(layout, "M01", "1")
    assert p.reason == "AB: outside calibration"
    assert p.status == SOLVED
    assert np.isnan(p.lengths_mm[0])


def test_a_broken_triangle_is_named_and_its_common_edge_left_out() -> None:
    # a wide range makes a length that cannot close readable
    case = laid()
    far = {}
    for key, own in case.features.items():
        if (own.identity.module, own.identity.sensor) == ("M01", "CD"):
            own = replace(own, signal=own.signal + 0.8 * np.array([170.0, 0.0, 0.0, 0.0]))
        far[key] = own
    records = tuple(replace(r, x_high=9.0, signal_high=1e4) for r in case.calibration.records)
    wide = replace(case.calibration, records=records)
    intake = case.read.intake
    layout = analyse_layout(
        far,
        wide,
        case.variance,  # type: ignore[arg-type]
        None,
        case.description,
        (intake.modules, intake.sensors),
    )
    assert layout is not None
    p = of(layout, "M01", "1")
    assert p.reason == "triangle inequality broken: CD left out"
    assert p.status == SOLVED
    assert not p.used[[e.sensor for e in p.edges].index("CD")]
    assert "placement-in-part" in codes(layout)


def test_a_node_of_unknown_place_has_no_error_but_a_shape() -> None:
    case = laid()
    lost = {k: replace(f, known_mm=_without(f.known_mm, 2)) for k, f in case.features.items()}
    p = of(case.again(lost), "M01", "1")
    assert p.status == SOLVED
    assert np.isfinite(p.adjusted_mm).all()
    assert p.after_datum is not None
    assert p.after_fit is not None
    assert np.isnan(p.after_datum.sizes_mm[2])
    assert np.isfinite(p.after_fit.sizes_mm[[0, 1, 3]]).all()
    origin = {k: replace(f, known_mm=_without(f.known_mm, 0)) for k, f in case.features.items()}
    p = of(case.again(origin), "M01", "1")
    assert p.after_datum is None
    assert p.after_fit is not None


def _without(known: np.ndarray, node: int) -> np.ndarray:
    known = known.copy()
    known[:, node] = np.nan
    return known


def test_without_a_line_or_a_geometry_there_is_a_notice_and_no_shape() -> None:
    case = laid()
    intake = case.read.intake
    registers = intake.modules, intake.sensors
    assert analyse_layout({}, case.calibration, None, None, case.description, registers) is None
    nothing = analyse_layout(case.features, None, None, None, case.description, registers)
    assert nothing is not None
    assert nothing.placements == ()
    assert codes(nothing) == {"layout-without-line"}
    bare = case.again(description=replace(case.description, geometries={}))
    assert bare.placements == ()
    assert codes(bare) == {"no-geometry"}
    loose = case.again(sensors=intake.sensors.assign(to=""))
    assert codes(loose) == {"no-geometry"}
    sensors = intake.sensors.copy()
    sensors.loc[sensors["sensor"] == "CD", "to"] = "elsewhere"
    assert codes(case.again(sensors=sensors)) == {"no-edge"}


def test_without_a_nested_fit_only_own_lines_read() -> None:
    case = laid()
    intake = case.read.intake
    layout = analyse_layout(
        case.features, case.calibration, None, None, case.description, (intake.modules, intake.sensors)
    )
    assert layout is not None
    assert {p.line for p in layout.placements} == {OWN_LINE}


# ---------------------------------------------------------------- tables, maps, figures


def test_tables_begin_with_their_promised_columns_and_hold_every_placement() -> None:
    layout = laid().layout
    assert list(layout.nodes.columns) == list(NODE_COLUMNS)
    assert list(layout.edges.columns) == list(EDGE_COLUMNS)
    assert len(layout.nodes) == 32 * 4
    assert len(layout.edges) == 32 * 6
    origin = layout.nodes[layout.nodes["node"] == "A"]
    assert (origin[["x_mm", "y_mm", "sd_x_mm", "sd_y_mm", "error_mm"]] == 0.0).all(axis=None)
    along = layout.nodes[layout.nodes["node"] == "B"]
    assert along["y_mm"].abs().max() < 1e-9
    assert along["known_y_mm"].abs().max() < 1e-9
    sums = layout.edges.groupby(["read_by", "module", "placement"])["redundancy"].sum()
    assert sums.to_numpy() == pytest.approx(1.0)
    difference = layout.edges["adjusted_length_mm"] - layout.edges["length_mm"]
    assert difference.to_numpy() == pytest.approx(layout.edges["residual_mm"].to_numpy(), abs=1e-9)


def test_errors_after_the_best_fit_are_never_larger_than_in_the_frame_of_a_datum() -> None:
    for p in laid().layout.placements:
        assert p.after_datum is not None
        assert p.after_fit is not None
        assert p.after_fit.rms_mm <= p.after_datum.rms_mm + 1e-9
        assert p.after_fit.predicted_rms_mm <= p.after_datum.predicted_rms_mm + 1e-9
        low, high = p.after_fit.predicted_rms_low_mm, p.after_fit.predicted_rms_high_mm
        assert low < p.after_fit.predicted_rms_mm < high


def test_monte_carlo_stands_beside_first_order() -> None:
    for p in laid().layout.of_line(OWN_LINE):
        assert p.monte_carlo is not None
        assert p.monte_carlo.draws == 1000
        assert p.monte_carlo.failed == 0
        assert not p.monte_carlo.first_order_fails.any()
        first, second = (np.sqrt(np.diag(c)) for c in (p.covariance_mm2, p.monte_carlo.covariance_mm2))
        assert second == pytest.approx(first, rel=0.1, abs=1e-9)


def test_first_order_is_said_to_fail_where_a_shape_is_flat() -> None:
    def rebuilt(height: float) -> Placement:
        nodes = {"A": (0.0, 0.0), "B": (100.0, 0.0), "C": (50.0, height)}
        ends = [("AB", "A", "B"), ("AC", "A", "C"), ("BC", "B", "C")]
        network, _ = network_of(Geometry("kite", nodes, ("A", "B")), ends)
        assert network is not None
        lengths = distances(network.layout_mm, network.pairs)
        rows = np.arange(3)
        shape = PlacedShape("g", "M", "", "t.csv", 1, "1", network, network.layout_mm, rows)
        drawn = 0.4 * np.random.default_rng(1).standard_normal((1000, 3))
        read = LengthsOfPlacement(OWN_LINE, lengths, 0.16 * np.eye(3), drawn, np.zeros((1000, 6)), {})
        return adjust_placement(shape, read, float("nan")).placement

    steep, flat = rebuilt(60.0), rebuilt(6.0)
    assert steep.monte_carlo is not None
    assert flat.monte_carlo is not None
    assert steep.monte_carlo.first_order_fails.tolist() == [False, False, False]
    assert flat.monte_carlo.first_order_fails[2]
    assert flat.monte_carlo.failed > 50  # triangles that do not close
    assert steep.monte_carlo.failed == 0
    assert flat.amplification.max() > 3 * steep.amplification.max()


def test_table_files_begin_with_the_promised_columns_and_every_column_is_explained() -> None:
    layout = laid().layout
    for name, frame in (("layout", layout.nodes), ("layout_edges", layout.edges)):
        header = csv_bytes(frame, name).decode().splitlines()[0].split(",")
        assert header[: len(CONTRACT_COLUMNS[name])] == list(CONTRACT_COLUMNS[name])
    frames = (layout.nodes, layout.edges, layout.errors, layout.extra, layout.sums)
    columns = {str(column) for frame in frames for column in frame}
    assert sorted(column for column in columns if not describe_column(column)) == []


def test_the_map_of_amplification_covers_what_can_be_read() -> None:
    (found,) = laid().layout.amplification
    assert (found.strain_low, found.strain_high) == pytest.approx((0.0, 0.4), abs=0.01)
    assert found.by_node.shape == (len(found.stretch), len(found.shear), 4)
    known = np.isfinite(found.root_mean_square)
    assert 0.05 < known.mean() < 0.9
    assert (found.largest[known] >= found.root_mean_square[known]).all()
    assert found.nodes == tuple(PANEL)


def test_a_geometry_says_what_checks_what() -> None:
    geometry = Geometry("panel", dict(PANEL), ("A", "B"))
    pairs = [("AB", "A", "B"), ("AC", "A", "C"), ("AD", "A", "D"), ("BC", "B", "C"), ("BD", "B", "D")]

    def facts(ends: list[tuple[str, str, str]]) -> tuple[int, str, tuple[str, ...]]:
        network, left = network_of(geometry, ends)
        assert network is not None
        assert left == ()
        found = facts_of(network)
        return found.redundancy, found.statement, found.flexible_nodes

    assert facts([*pairs, ("CD", "C", "D")]) == (1, DETECTABLE, ())
    assert facts(pairs) == (0, JUST, ())
    assert facts(pairs[:4]) == (-1, UNDER, ("D",))
    assert facts_of(laid("braced", 2).layout.placements and _braced()).statement == NAMEABLE


def _braced():  # type: ignore[no-untyped-def]
    case = laid("braced", 2)
    geometry = next(iter(case.description.geometries.values()))
    ends = [(e.sensor, e.first, e.second) for e in case.layout.placements[0].edges]
    return network_of(geometry, ends)[0]


def test_node_error_is_judged_node_by_node() -> None:
    case = laid()
    figures = case.layout.figures
    assert len(figures) == 4 * 4
    assert set(figures["figure"]) == {"node_error"}
    assert (figures["low"] < figures["estimate"]).all()
    assert (figures["estimate"] < figures["high"]).all()
    assert figures["degrees_of_freedom"].between(1.0, 20.0).all()
    limits = judge_limits(case.description, case.calibration, [figures])
    rows = limits.table[limits.table["limit"] == "node_error"]
    assert set(rows["sensor"]) == {"", *PANEL}
    assert set(rows.loc[rows["sensor"] != "", "verdict"]) == {"met"}
    assert rows.loc[rows["sensor"] == "", "subject"].tolist() == ["a node of a new module of generation 1"]


def test_missing_signals_of_single_placements_are_theirs_alone() -> None:
    case = laid()
    lost = {}
    for key, own in case.features.items():
        if (own.identity.module, own.identity.sensor) == ("M02", "BD"):
            own = replace(own, signal=np.where(np.arange(4) == 1, np.nan, own.signal))
        lost[key] = own
    layout = case.again(without_nan(lost))
    assert of(layout, "M02", "2").reason == "BD: no signal"
    assert of(layout, "M02", "1").reason == ""
    assert of(layout, "M01", "2").reason == ""
