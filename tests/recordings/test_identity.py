"""Who says which trial a recording is: the order of the sources, conflicts, and what nobody says."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import pytest

from campaign.recordings.description import Description
from campaign.recordings.description_file import read_description
from campaign.recordings.identity import BY_REQUEST, Identification, identify, naming_rules
from campaign.recordings.recording import Channel, Recording
from campaign.recordings.register import Registers, read_register
from campaign.recordings.sensor_share import Shares, split_at_restarts, trials_of_recording

PATTERN = "{module}_{sensor}_{kind}_r{repetition}"


def registers(**texts: str) -> Registers:
    return Registers(**{name: read_register(name, text.encode())[0] for name, text in texts.items()})


def channel(quantity: str, values: object, position: int = 1, unit: str = "", **owner: object) -> Channel:
    units = {
        "signal": "pF",
        "length": "mm",
        "elongation": "mm",
        "strain": "mm/mm",
        "time": "s",
        "pressure": "kPa",
    }
    array = np.asarray(values, dtype=float)
    return Channel(quantity, unit or units.get(quantity, ""), array, quantity, position, **owner)


def recording(
    file: str = "M01_AB_staircase_r1.csv", *channels: Channel, **parts: Mapping[str, str]
) -> Recording:
    chosen = channels or (channel("length", [60, 66, 72]), channel("signal", [100, 110, 120], 2))
    rows = len(chosen[0].values)
    return Recording(file, "0" * 64, 100, rows, chosen, **parts)


def describe(name: str | None = PATTERN, **same: str) -> Description:
    return Description("t", names=(name,) if name else (), same=same)


def settle(made: Recording, description: Description, known: Registers | None = None) -> Identification:
    return identify(made, naming_rules(description, known or Registers()))


def shares(made: Recording, description: Description, known: Registers | None = None) -> Shares:
    rules = naming_rules(description, known or Registers())
    return trials_of_recording(made, identify(made, rules), rules)


def codes(found: Identification | Shares) -> list[str]:
    return [notice.code for notice in found.notices]


# ---------------------------------------------------------------- sources and their order


def test_every_source_is_heard() -> None:
    made = recording("x_r3.csv", preamble={"module": "M01"}, constants={"sensor": "AB"})
    known = registers(trials="file,session\nx_r3.csv,2\n")
    found = settle(made, describe("x_r{repetition}", kind="hold"), known)
    assert found.notices == ()
    assert found.values == {
        "module": "M01",
        "sensor": "AB",
        "session": "2",
        "repetition": "3",
        "kind": "hold",
    }
    assert found.sources["session"] == "trials.csv, line 2"
    assert found.sources["kind"] == "[recordings.same]"


@pytest.mark.parametrize(
    ("preamble", "constants", "trials", "sources"),
    [
        ({"module": "M02"}, {}, "", ("the preamble", "the name")),
        ({}, {"module": "M02"}, "", ("a constant column", "the name")),
        ({}, {}, "file,module\nM01_AB_staircase_r1.csv,M02\n", ("trials.csv, line 2", "the name")),
        ({"sensor": "CD"}, {}, "", ("the preamble", "the name")),
        ({"repetition": "2"}, {}, "", ("the preamble", "the name")),
        ({"kind": "hold"}, {}, "", ("the preamble", "the name")),
    ],
)
def test_where_two_disagree_nothing_is_guessed(
    preamble: dict[str, str], constants: dict[str, str], trials: str, sources: tuple[str, str]
) -> None:
    known = registers(trials=trials) if trials else None
    found = settle(recording(preamble=preamble, constants=constants), describe(), known)
    [notice] = found.notices
    assert (notice.code, notice.weight) == ("identity-conflict", "set aside")
    assert all(source in notice.what for source in sources)
    assert not found.settled


def test_one_word_and_one_number_written_in_two_ways_agree() -> None:
    description = read_description(
        b"format=1\n[campaign]\ntitle='t'\n[recordings]\nname='{module}_{sensor}_{kind}_r{repetition}'\n"
        b"[recordings.kinds]\nCal = 'staircase'\n"
    )
    made = recording("M01_AB_cal_r01.csv", preamble={"repetition": "1", "kind": "CAL"})
    found = settle(made, description)
    assert found.notices == ()
    assert (found.values["kind"], found.values["repetition"]) == ("staircase", "1")


def test_what_all_share_gives_way_to_names_and_registers_but_not_to_preambles() -> None:
    assert settle(recording(), describe(module="M09", kind="hold")).values["module"] == "M01"
    conflicting = recording("a.csv", preamble={"module": "M01"})
    assert codes(settle(conflicting, describe(None, module="M09", kind="hold"))) == ["identity-conflict"]


def test_a_name_that_can_be_read_in_two_ways_is_set_aside_and_shows_both() -> None:
    [notice] = settle(recording("M01_A_B_staircase_r1.csv"), describe()).notices
    assert notice.code == "name-ambiguous"
    assert "'A_B'" in notice.what
    assert "'M01_A'" in notice.what


@pytest.mark.parametrize(
    ("file", "same", "missing"),
    [
        ("a.csv", {}, "module and the kind"),
        ("a.csv", {"module": "M01"}, "kind"),
        ("a.csv", {"kind": "hold"}, "module"),
    ],
)
def test_what_nobody_says_is_named(file: str, same: dict[str, str], missing: str) -> None:
    [notice] = settle(recording(file), describe(**same)).notices
    assert (notice.code, notice.weight) == ("identity-missing", "set aside")
    assert missing in notice.what
    assert "no pattern" in notice.what


def test_an_unknown_kind_comes_with_the_nearest_word() -> None:
    [unknown, missing] = settle(recording("M01_AB_starcase_r1.csv"), describe()).notices
    assert (unknown.code, missing.code) == ("kind-unknown", "identity-missing")
    assert "'staircase'" in unknown.remedy


@pytest.mark.parametrize("word", ["one", "1.5", "-1", "1e3", "²"])
def test_a_repetition_that_is_no_whole_number_is_set_aside(word: str) -> None:
    made = recording("a.csv", preamble={"repetition": word})
    assert codes(settle(made, describe(None, module="M01", kind="hold"))) == ["repetition-unreadable"]


@pytest.mark.parametrize("name", ["=M01", "+M01", "-M01", "−M01", "@M01", "M\u202e01"])
def test_refused_ids_are_set_aside_wherever_they_come_from(name: str) -> None:
    made = recording("a.csv", preamble={"module": name})
    found = settle(made, describe(None, kind="hold"))
    assert codes(found) == ["id-refused"]
    assert found.notices[0].what.isprintable()


@pytest.mark.parametrize("name", ["M 01", "../../etc", "模块", "M'01\"", "x" * 300, "الوحدة"])
def test_unusual_ids_are_taken(name: str) -> None:
    found = settle(recording("a.csv", preamble={"module": name}), describe(None, kind="hold"))
    assert found.notices == ()
    assert found.values["module"] == name


# ---------------------------------------------------------------- registers


@pytest.mark.parametrize(
    ("use", "reason", "code"),
    [
        ("no", "slipped", BY_REQUEST),
        ("No", "slipped", BY_REQUEST),
        ("no", "", "reason-missing"),
        ("perhaps", "x", "use-unclear"),
    ],
)
def test_use_no_leaves_out_and_needs_a_reason(use: str, reason: str, code: str) -> None:
    known = registers(trials=f"file,use,reason\nM01_AB_staircase_r1.csv,{use},{reason}\n")
    found = settle(recording(), describe(), known)
    assert codes(found) == [code]
    assert found.settled == (code == BY_REQUEST)


@pytest.mark.parametrize("use", ["", "yes", "TRUE"])
def test_use_yes_changes_nothing(use: str) -> None:
    known = registers(trials=f"file,use\nM01_AB_staircase_r1.csv,{use}\n")
    assert settle(recording(), describe(), known).notices == ()


def test_two_rows_for_one_file_set_it_aside() -> None:
    known = registers(trials="file,session\nM01_AB_staircase_r1.csv,1\nM01_AB_staircase_r1.csv,2\n")
    assert codes(settle(recording(), describe(), known)) == ["register-row-refused"]


def test_modules_give_generation_and_batch() -> None:
    known = registers(modules="module,generation,batch\nM01,first,B1\n")
    found = settle(recording(), describe(), known)
    assert (found.values["generation"], found.values["batch"]) == ("first", "B1")


def test_a_generation_said_in_two_ways_is_a_conflict() -> None:
    known = registers(modules="module,generation\nM01,first\n")
    made = recording(preamble={"generation": "second"})
    assert codes(settle(made, describe(), known)) == ["identity-conflict"]
    assert settle(recording(), describe(generation="second"), known).values["generation"] == "first"


def test_a_module_without_generation_is_set_aside_where_others_have_one() -> None:
    known = registers(modules="module,generation\nM02,first\n")
    assert codes(settle(recording(), describe(), known)) == ["module-not-listed", "generation-missing"]


def test_a_module_that_its_register_contradicts_is_set_aside() -> None:
    known = registers(modules="module,generation\nM01,first\nM01,second\n")
    assert "register-row-refused" in codes(settle(recording(), describe(), known))


def test_a_module_set_aside_by_its_fate_can_be_put_back() -> None:
    known = registers(modules="module,fate,reason\nM01,set aside,delaminated before testing\n")
    found = settle(recording(), describe(), known)
    assert codes(found) == ["module-set-aside"]
    assert "delaminated" in found.notices[0].what
    assert found.settled


# ---------------------------------------------------------------- shares of sensors


def test_length_elongation_and_strain_follow_from_the_rest_length() -> None:
    known = registers(
        sensors="module,sensor,rest_length,rest_length_uncertainty,from,to\nM01,AB,60,0.1,A,B\n"
    )
    [trial] = shares(recording(), describe(), known).trials
    assert trial.reference == "length"
    np.testing.assert_allclose(trial.elongation_mm, [0, 6, 12])
    np.testing.assert_allclose(trial.strain, [0, 0.1, 0.2])
    assert (trial.identity.rest_length_mm, trial.identity.rest_length_uncertainty_mm) == (60, 0.1)
    assert trial.identity.position == "A–B"


@pytest.mark.parametrize(
    ("quantity", "values", "length", "strain"),
    [("elongation", [0, 6], [60, 66], [0, 0.1]), ("strain", [0, 0.1], [60, 66], [0, 0.1])],
)
def test_any_of_the_three_may_be_the_recorded_one(
    quantity: str, values: list[float], length: list[float], strain: list[float]
) -> None:
    known = registers(sensors="module,sensor,rest_length\nM01,AB,60\n")
    made = recording("M01_AB_staircase_r1.csv", channel(quantity, values), channel("signal", [1, 2], 2))
    [trial] = shares(made, describe(), known).trials
    assert trial.reference == quantity
    np.testing.assert_allclose(trial.length_mm, length)
    np.testing.assert_allclose(trial.strain, strain)


def test_no_rest_length_is_ever_invented() -> None:
    [trial] = shares(recording(), describe()).trials
    assert math.isnan(trial.identity.rest_length_mm)
    assert trial.elongation_mm is None
    assert trial.strain is None
    np.testing.assert_allclose(trial.length_mm, [60, 66, 72])


def wide(*references: Channel) -> Recording:
    signals = [channel("signal", [1, 2], 2, sensor="AB"), channel("signal", [3, 4], 3, sensor="BC")]
    return recording("M01_staircase_r1.csv", *references, *signals)


WIDE = "{module}_{kind}_r{repetition}"


def test_in_a_wide_file_a_stage_is_not_every_sensors_length() -> None:
    found = shares(wide(channel("length", [60, 66])), describe(WIDE))
    assert codes(found) == ["strain-not-known", "strain-not-known"]
    assert len(found.trials) == 2
    assert set(found.set_aside) == {("M01_staircase_r1.csv", "AB", 1), ("M01_staircase_r1.csv", "BC", 1)}


def test_along_says_whose_length_it_is() -> None:
    found = shares(wide(channel("length", [60, 66], along=("BC",))), describe(WIDE))
    first, second = found.trials
    assert first.length_mm is None
    np.testing.assert_allclose(second.length_mm, [60, 66])
    assert list(found.set_aside) == [("M01_staircase_r1.csv", "AB", 1)]


def test_a_column_of_its_own_comes_before_that_of_the_file() -> None:
    own = channel("length", [70, 77], 4, sensor="AB")
    found = shares(wide(channel("length", [60, 66], along=("AB", "BC")), own), describe(WIDE))
    np.testing.assert_allclose(found.trials[0].length_mm, [70, 77])
    assert codes(found) == ["two-references"]


def test_a_strain_column_of_the_file_is_every_sensors_strain() -> None:
    found = shares(wide(channel("strain", [0, 0.1])), describe(WIDE))
    assert found.notices == ()
    assert all(trial.strain is not None for trial in found.trials)


def test_lengths_follow_from_node_columns() -> None:
    nodes = [
        channel("node_x", [0, 0], 4, node="A"),
        channel("node_y", [0, 0], 5, node="A"),
        channel("node_x", [3, 6], 6, node="B"),
        channel("node_y", [4, 8], 7, node="B"),
    ]
    known = registers(sensors="module,sensor,from,to\nM01,AB,A,B\nM01,BC,B,C\n")
    found = shares(wide(*nodes), describe(WIDE), known)
    np.testing.assert_allclose(found.trials[0].length_mm, [5, 10])
    assert {name: places.tolist() for name, places in found.trials[0].nodes.items()} == {
        "A": [[0, 0], [0, 0]],
        "B": [[3, 4], [6, 8]],
    }
    assert list(found.set_aside) == [("M01_staircase_r1.csv", "BC", 1)]


def test_repetitions_may_stand_side_by_side() -> None:
    signals = [channel("signal", [i, i + 1], i + 1, repetition=i) for i in (1, 2, 3)]
    made = recording("a.csv", channel("length", [6.0, 5.5]), *signals)
    found = shares(made, describe(None, module="cell", sensor="C1", kind="staircase"))
    assert [trial.identity.repetition for trial in found.trials] == [1, 2, 3]
    assert all(trial.length_mm is not None for trial in found.trials)
    assert found.notices == ()
    assert not found.repetition_assumed


def test_signals_that_claim_to_be_one_are_set_aside() -> None:
    made = recording(
        "M01_AB_staircase_r1.csv", channel("length", [1, 2]), *[channel("signal", [1, 2], p) for p in (2, 3)]
    )
    found = shares(made, describe())
    assert codes(found) == ["signals-alike"]
    assert found.set_aside == {("M01_AB_staircase_r1.csv", "AB", 1): ("signals-alike",)}


def test_a_header_that_contradicts_the_name_is_a_conflict() -> None:
    made = recording(
        "M01_AB_staircase_r1.csv", channel("length", [1, 2]), channel("signal", [1, 2], 2, sensor="CD")
    )
    found = shares(made, describe())
    assert codes(found) == ["identity-conflict"]
    assert "column 2" in found.notices[0].what


def test_nobody_says_whose_signal_it_is() -> None:
    found = shares(recording("a.csv"), describe(None, module="M01", kind="staircase"))
    assert codes(found) == ["identity-missing"]
    assert found.trials == ()


def test_a_hold_needs_only_time_and_signal() -> None:
    made = recording("M01_AB_hold_r1.csv", channel("time", [0, 1]), channel("signal", [1, 2], 2))
    found = shares(made, describe())
    assert found.notices == ()
    assert found.trials[0].length_mm is None


def test_a_sensor_set_aside_by_its_fate_can_be_put_back() -> None:
    known = registers(sensors="module,sensor,fate,reason\nM01,AB,failed before testing,torn\n")
    found = shares(recording(), describe(), known)
    assert found.set_aside == {("M01_AB_staircase_r1.csv", "AB", 1): ("sensor-set-aside",)}
    assert "torn" in found.notices[0].what


def test_a_sensor_that_failed_later_stays_in_use() -> None:
    known = registers(sensors="module,sensor,fate,failed_at_cycle\nM01,AB,failed,1200\n")
    assert shares(recording(), describe(), known).set_aside == {}


@pytest.mark.parametrize(
    ("kind", "file", "lengths", "contradicted"),
    [
        ("hold", "120mm", [119.9, 120.1, 120.0], False),
        ("hold", "120mm", [60, 119, 119, 119, 119, 119], False),
        ("hold", "120mm", [60, 90, 90, 90, 90, 120], True),
        ("hold", "12cm", [120, 120, 120], False),
        ("cyclic", "120mm", [60, 120, 60], False),
        ("cyclic", "120mm", [60, 100, 60], True),
        ("hold", "120", [60, 60, 60], False),
    ],
)
def test_a_length_in_the_name_that_the_data_contradict(
    kind: str, file: str, lengths: list[float], contradicted: bool
) -> None:
    made = recording(f"M01_AB_{kind}_{file}.csv", channel("length", lengths), channel("signal", lengths, 2))
    found = shares(made, describe("{module}_{sensor}_{kind}_{length}"))
    assert codes(found) == (["set-point-contradicted"] if contradicted else [])
    assert bool(found.set_aside) == contradicted


@pytest.mark.parametrize(("pressure", "contradicted"), [([93.7, 108.2], False), ([290, 310], True)])
def test_a_pressure_in_the_name_that_the_data_contradict(pressure: list[float], contradicted: bool) -> None:
    channels = (channel("elongation", [0, 1]), channel("signal", [1, 2], 2), channel("pressure", pressure, 3))
    found = shares(
        recording("1_seal_1bar.csv", *channels),
        describe("{repetition}_{module}_{pressure}", kind="cyclic", sensor="S"),
    )
    assert bool(found.set_aside) == contradicted


def test_a_set_point_in_a_unit_of_something_else_is_noted() -> None:
    made = recording("M01_AB_hold_5pF.csv", channel("length", [1, 2]), channel("signal", [1, 2], 2))
    assert codes(shares(made, describe("{module}_{sensor}_{kind}_{length}"))) == ["set-point-unreadable"]


def test_a_recording_is_split_at_restarts_only_when_told_to() -> None:
    channels = (
        channel("time", [0, 1, 2, 0, 1, 2, 1.5]),
        channel("length", np.arange(7), 2),
        channel("signal", np.arange(7), 3),
    )
    made = recording("M01_AB_staircase_r4.csv", *channels)
    assert len(shares(made, describe()).trials) == 1
    description = Description("t", names=(PATTERN,), split_where_time_restarts=True)
    found = shares(made, description)
    assert codes(found) == ["split-at-restarts"]
    assert [trial.identity.repetition for trial in found.trials] == [4, 5]
    assert [list(trial.signal) for trial in found.trials] == [[0, 1, 2], [3, 4, 5, 6]]
    assert [trial.time_is_ordered for trial in found.trials] == [True, False]
    assert len(split_at_restarts(found.trials[0])) == 1
