"""Layout trials: where placements are found in tables and logs, and what is kept of each."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.notices import NOTICE_CODES, Notice
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.layout import features_of_layout

NODES = ("A", "B", "C")
SHAPES = np.array(
    [
        [[0.0, 0.0], [90.0, 0.0], [40.0, 60.0]],
        [[0.0, 0.0], [110.0, 0.0], [40.0, 60.0]],
        [[0.0, 0.0], [110.0, 0.0], [45.0, 75.0]],
        [[5.0, 0.0], [110.0, 3.0], [45.0, 60.0]],
    ]
)
SIGNALS = np.array([100.0, 112.0, 113.0, 108.0])


def identity() -> TrialIdentity:
    who = ("g", "", "M01", "AB", "AB", 1, "F", "", "")
    return TrialIdentity("M01_layout_r1.csv", "layout", *who, 90.0, 0.1)


def trial(rows: np.ndarray, signal: np.ndarray, nodes: np.ndarray | None = None, **more: object) -> Trial:
    """A trial whose rows are at the numbered shapes."""
    places = SHAPES[rows] if nodes is None else nodes
    return Trial(
        identity(),
        signal,
        "pF",
        length_mm=np.linalg.norm(places[:, 1] - places[:, 0], axis=1),
        nodes={name: places[:, k] for k, name in enumerate(NODES)},
        **more,  # type: ignore[arg-type]
    )


def codes(notices: Iterable[Notice]) -> set[str]:
    found = {notice.code for notice in notices}
    assert found <= set(NOTICE_CODES)
    return found


def log(noise_mm: float, seed: int, dwell: int = 30, ramp: int = 8) -> Trial:
    """A log that rests at every shape and moves evenly to the next; signals settle by 1 pF."""
    rng = np.random.default_rng(seed)
    places, signals = [], []
    for k, shape in enumerate(SHAPES):
        if k:
            share = np.linspace(0.0, 1.0, ramp + 2)[1:-1, None, None]
            places.append(SHAPES[k - 1] + share * (shape - SHAPES[k - 1]))
            signals.append(np.full(ramp, 105.0))
        places.append(np.repeat(shape[None], dwell, axis=0))
        signals.append(SIGNALS[k] + np.where(np.arange(dwell) < 8, 1.0, 0.0))
    nodes = np.concatenate(places)
    nodes = nodes + noise_mm * rng.standard_normal(nodes.shape)
    signal = np.concatenate(signals) + 0.01 * rng.standard_normal(len(nodes))
    return trial(np.zeros(0, dtype=int), signal, nodes, time_s=np.arange(len(nodes), dtype=float))


def test_every_row_of_a_table_is_a_placement() -> None:
    found = features_of_layout(trial(np.arange(4), SIGNALS))
    assert found.names == ("1", "2", "3", "4")
    assert found.signal == pytest.approx(SIGNALS)
    assert found.nodes == NODES
    assert found.known_mm == pytest.approx(SHAPES)
    assert found.known_length_mm == pytest.approx(np.linalg.norm(SHAPES[:, 1] - SHAPES[:, 0], axis=1))
    assert np.isnan(found.standard_error).all()
    assert codes(found.notices) == set()


def test_a_table_with_times_is_a_table_all_the_same() -> None:
    found = features_of_layout(trial(np.arange(4), SIGNALS, time_s=np.arange(4.0)))
    assert found.names == ("1", "2", "3", "4")
    assert found.count.tolist() == [1, 1, 1, 1]


def test_blocks_of_a_placement_column_are_averaged_without_their_settling() -> None:
    rows = np.repeat(np.arange(4), 6)
    settling = np.tile([5.0, 5.0, 0.0, 0.0, 0.0, 0.0], 4)
    noise = 0.02 * np.random.default_rng(0).standard_normal(24)
    found = features_of_layout(
        trial(rows, SIGNALS[rows] + settling + noise, placement=rows + 1.0, time_s=np.arange(24.0))
    )
    assert found.names == ("1", "2", "3", "4")
    assert found.signal == pytest.approx(SIGNALS, abs=0.05)
    assert found.count.tolist() == [4, 4, 4, 4]
    assert ((found.standard_error > 0) & (found.standard_error < 0.05)).all()


def test_a_number_that_comes_again_is_another_placement() -> None:
    rows = np.array([0, 0, 1, 1, 0, 0])
    found = features_of_layout(trial(rows, SIGNALS[rows], placement=np.array([1.0, 1, 2, 2, 1, 1])))
    assert found.names == ("1", "2", "1 (2)")
    assert found.known_mm == pytest.approx(SHAPES[[0, 1, 0]])


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([0.0, 0.02]), st.integers(12, 40), st.integers(3, 12))
def test_placements_of_a_log_are_where_no_node_moves(seed: int, noise: float, dwell: int, ramp: int) -> None:
    found = features_of_layout(log(noise, seed, dwell, ramp))
    assert found.names == ("1", "2", "3", "4")
    assert found.known_mm == pytest.approx(SHAPES, abs=max(5 * noise, 1e-6))
    if dwell >= 24:  # the settling lies within the third that is left out
        assert found.signal == pytest.approx(SIGNALS, abs=0.05)


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.integers(40, 60))
def test_noisy_nodes_want_longer_dwells(seed: int, dwell: int) -> None:
    # a tenth of a millimetre of noise hides the ends of moves: only dwells much longer than moves are told
    found = features_of_layout(log(0.1, seed, dwell, ramp=4))
    assert found.names == ("1", "2", "3", "4")
    assert found.known_mm == pytest.approx(SHAPES, abs=0.15)


def test_a_log_at_one_shape_is_one_placement() -> None:
    rows = np.zeros(40, dtype=int)
    found = features_of_layout(trial(rows, SIGNALS[rows], time_s=np.arange(40.0)))
    assert found.names == ("1",)


def test_temperature_is_that_of_each_placement() -> None:
    found = features_of_layout(
        trial(np.arange(4), SIGNALS, temperature_c=np.array([20.0, 21.0, np.nan, 23.0]))
    )
    assert found.temperature_c == pytest.approx([20.0, 21.0, np.nan, 23.0], nan_ok=True)


def test_a_node_that_was_lost_is_unknown_there_and_nowhere_else() -> None:
    nodes = SHAPES.copy()
    nodes[2, 1] = np.nan
    found = features_of_layout(trial(np.arange(4), SIGNALS, nodes))
    assert np.isnan(found.known_mm[2, 1]).all()
    assert np.isfinite(np.delete(found.known_mm, 2, axis=0)).all()


def test_placements_without_a_signal_are_counted_and_left_out() -> None:
    signal = SIGNALS.copy()
    signal[1] = np.nan
    found = features_of_layout(trial(np.arange(4), signal))
    assert found.names == ("1", "3", "4")
    assert codes(found.notices) == {"placement-without-signal"}
    nothing = features_of_layout(trial(np.arange(4), np.full(4, np.nan)))
    assert nothing.names == ()
    assert codes(nothing.notices) == {"placement-without-signal", "no-placements"}


def test_rows_without_a_number_of_their_placement_are_counted() -> None:
    number = np.array([1.0, np.nan, 3.0, 4.0])
    found = features_of_layout(trial(np.arange(4), SIGNALS, placement=number))
    assert found.names == ("1", "3", "4")
    assert codes(found.notices) == {"missing-values"}


def test_a_trial_without_nodes_says_so() -> None:
    found = features_of_layout(Trial(identity(), SIGNALS, "pF"))
    assert found.names == ()
    assert codes(found.notices) == {"no-node-positions"}
