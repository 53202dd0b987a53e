"""``[plan]``: what is planned is read in strain, and all that keeps it from being rehearsed is named."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.notices import CampaignStops, Notice
from campaign.recordings.description_file import read_description, read_plan_file
from campaign.recordings.planned_design import PlannedDesign, PlannedLine

HEAD = "format = 1\n[campaign]\ntitle = 't'\n"
DESIGN = "generations = 2\nmodules = 6\nsensors = 5\nrepetitions = 3\n"
COMPONENTS = "[plan.components]\nmodule = '1 %'\nsensor = '2 %'\nrepetition = 0.003\nresidual = '0.2 %'\n"
PANEL = "[geometry.panel]\nnodes = { A = [0, 0], B = [80, 0], C = [80, 60], D = [0, 60] }\n"


def plan_text(design: str = DESIGN, components: str = COMPONENTS, rest: str = "") -> str:
    return f"{HEAD}[plan]\n{design}{components}{rest}"


def planned(text: str) -> PlannedDesign:
    design = read_plan_file(text.encode(), "p.toml").planned
    assert design is not None
    return design


def faults_of(text: str) -> tuple[Notice, ...]:
    with pytest.raises(CampaignStops) as stops:
        read_plan_file(text.encode(), "p.toml")
    assert {(n.weight, n.file, n.done) for n in stops.value.notices} == {
        ("stops", "p.toml", "nothing is written")
    }
    assert all(notice.remedy for notice in stops.value.notices)
    return stops.value.notices


def test_a_short_plan_takes_what_is_usual() -> None:
    design = planned(plan_text())
    first, second = design.generations
    assert (first.name, second.name) == ("generation 1", "generation 2")
    assert (design.modules, design.repetitions, design.sessions, design.batches) == (6, 3, 1, 0)
    assert [place.position for place in design.places] == ["S1", "S2", "S3", "S4", "S5"]
    assert {place.rest_length_mm for place in design.places} == {80.0}
    assert design.levels == pytest.approx([0.05 * step for step in range(9)])
    assert design.descending
    assert design.kinds == ("staircase",)
    assert (first.signal_pf, first.gauge_factor) == (100.0, 1.0)
    assert first.module == PlannedLine(zero=0.01)
    assert first.repetition == PlannedLine(zero=0.003)
    assert first.noise == pytest.approx(0.2 * 0.002)


def test_spread_may_be_given_in_strain_length_or_signal() -> None:
    """Of 80 mm, 0.8 mm are 1 %; of 50 pF with a gauge factor of 0.8, 0.4 pF are 1 %."""
    text = COMPONENTS.replace("'1 %'", "'0.8 mm'").replace("'2 %'", "'0.4 pF'")
    first = planned(plan_text(components=text, rest="[plan.mean]\nsignal = '50 pF'\ngauge_factor = 0.8\n"))
    assert first.generations[0].module.zero == pytest.approx(0.01)
    assert first.generations[0].sensor.zero == pytest.approx(0.01)
    assert first.generations[0].slope_pf == pytest.approx(40.0)


def test_the_spread_of_a_line_grows_with_strain() -> None:
    line = "sensor = { zero = '1 %', slope = '5 %', correlation = 0.5 }"
    first = planned(plan_text(components=COMPONENTS.replace("sensor = '2 %'", line))).generations[0]
    assert first.sensor == PlannedLine(0.01, 0.05, 0.5)
    # at 20 % strain the slope adds 0.05 · 0.20 = 1 %: √(1 + 1 + 2 · 0.5) %
    assert first.sd_at("sensor", 0.20) == pytest.approx(0.01 * math.sqrt(3.0))
    assert first.sd_at("residual", 0.20) == pytest.approx(0.002)


def test_a_generation_may_differ_in_part() -> None:
    rest = "[plan.generation.new.components]\nsensor = '1 %'\n[plan.generation.new.mean]\nsignal = '120 pF'\n"
    design = planned(plan_text(DESIGN.replace("generations = 2", "generations = ['old', 'new']"), rest=rest))
    old, new = design.generations
    assert (old.sensor.zero, new.sensor.zero) == (0.02, 0.01)
    assert (old.module, old.residual) == (new.module, new.residual)
    assert (old.signal_pf, new.signal_pf) == (100.0, 120.0)


def test_geometry_gives_places_and_lengths() -> None:
    design = planned(plan_text(DESIGN.replace("sensors = 5", "sensors = 6"), rest=PANEL))
    assert [place.position for place in design.places] == ["AB", "AC", "AD", "BC", "BD", "CD"]
    assert [place.rest_length_mm for place in design.places] == [80.0, 100.0, 60.0, 60.0, 100.0, 80.0]
    assert design.geometry == "panel"
    edges = 'edges = [["A", "B"], ["B", "C"]]\n'
    two = planned(plan_text(DESIGN.replace("sensors = 5", "sensors = 2") + edges, rest=PANEL))
    assert [(place.start, place.end) for place in two.places] == [("A", "B"), ("B", "C")]
    assert two.mean_rest_length_mm == 70.0


def test_levels_may_be_counted_over_the_range_or_stated() -> None:
    counted = planned(plan_text(DESIGN + "levels = 4\n", rest="[range]\nstrain = 0.3\n"))
    assert counted.levels == pytest.approx([0.0, 0.1, 0.2, 0.3])
    stated = planned(plan_text(DESIGN + 'levels = [0, "5 %", 0.2]\ndirection = "up"\n'))
    assert stated.levels == (0.0, 0.05, 0.2)
    assert not stated.descending


def test_kinds_stand_in_our_order_with_staircases_first() -> None:
    more = "pressure = '0.05 %'\nrelaxation = '1 %'\n"
    text = plan_text(DESIGN + 'kinds = ["hold", "pressure"]\n', COMPONENTS + more)
    assert planned(text).kinds == ("staircase", "hold", "pressure")


@pytest.mark.parametrize(
    ("design", "components", "rest", "what"),
    [
        ("modules = 3\nsensors = 3\nrepetitions = 2\n", COMPONENTS, "", "[plan] generations: is not stated"),
        (DESIGN.replace("modules = 6\n", ""), COMPONENTS, "", "[plan] modules: is not stated"),
        (
            DESIGN.replace("modules = 6", "modules = 0"),
            COMPONENTS,
            "",
            "[plan] modules: 0 is not a whole number",
        ),
        (DESIGN.replace("modules = 6", "modules = 900"), COMPONENTS, "", "900 is more than a rehearsal runs"),
        (DESIGN.replace("modules = 6", "modules = 200"), COMPONENTS, "", "the plan asks for 6000 staircases"),
        (DESIGN.replace("generations = 2", "generations = 11"), COMPONENTS, "", "more than 10 generations"),
        (DESIGN.replace("generations = 2", "generations = ['a', 'a']"), COMPONENTS, "", "repeated"),
        (DESIGN + "batches = 7\n", COMPONENTS + "batch = 0\n", "", "7 batches of 6 modules"),
        (DESIGN, "", "", "[plan] components: are not stated"),
        (
            DESIGN,
            COMPONENTS.replace("residual = '0.2 %'\n", ""),
            "",
            "[plan.components] residual: is not stated",
        ),
        (DESIGN + "sessions = 2\n", COMPONENTS, "", "[plan.components] session: is not stated"),
        (DESIGN + "batches = 2\n", COMPONENTS, "", "[plan.components] batch: is not stated"),
        (DESIGN + "kinds = ['pressure']\n", COMPONENTS, "", "[plan.components] pressure: is not stated"),
        (DESIGN + "kinds = ['hold']\n", COMPONENTS, "", "[plan.components] relaxation: is not stated"),
        (DESIGN, COMPONENTS.replace("'1 %'", "'-1 %'"), "", "-1 % in strain is negative"),
        (DESIGN, COMPONENTS.replace("'1 %'", "2"), "", "200 % in strain is negative or more than all of it"),
        (DESIGN, COMPONENTS.replace("'1 %'", "'1 kPa'"), "", "[plan.components] module: "),
        (DESIGN, COMPONENTS.replace("'1 %'", "{ zero = 0.01, correlation = 2 }"), "", "outside −1 to 1"),
        (DESIGN + "levels = [0, 10, 20]\n", COMPONENTS, "", "a level of 20 mm/mm is 2000 % strain"),
        (DESIGN + "levels = [0.2, 0.1]\n", COMPONENTS, "", "each above the one before"),
        (DESIGN + "levels = 51\n", COMPONENTS, "", "51 is no number of levels"),
        (DESIGN + "rest_length = '80 km'\n", COMPONENTS, "", "[plan] rest_length: "),
        (DESIGN + "rest_length = 0\n", COMPONENTS, "", "0 mm is no length of a sensor"),
        (DESIGN + "kinds = ['layout']\n", COMPONENTS, "", "layouts need a geometry"),
        (DESIGN + "edges = [['A', 'B']]\n", COMPONENTS, "", "join nodes of no geometry"),
        (DESIGN, COMPONENTS, PANEL, "5 sensors, but [geometry.panel] has 6 pairs of nodes"),
        (DESIGN + "edges = [['A', 'E']]\n", COMPONENTS, PANEL, "[geometry.panel] has no node 'E'"),
        (DESIGN + "edges = 'AB'\n", COMPONENTS, PANEL, "no list of pairs of nodes"),
        (DESIGN, COMPONENTS, "[plan.mean]\nsignal = '0 pF'\n", "0 is not above zero"),
        (DESIGN, COMPONENTS, "[plan.mean]\nsignal = '5 kohm'\n", "[plan.mean] signal: "),
    ],
)
def test_what_cannot_be_rehearsed_is_named(design: str, components: str, rest: str, what: str) -> None:
    found = [notice.what for notice in faults_of(plan_text(design, components, rest))]
    assert any(what in one for one in found), found


@pytest.mark.parametrize(
    ("text", "near"),
    [
        (plan_text(DESIGN + "modulles = 3\n"), "did you mean 'modules'?"),
        (plan_text(components=COMPONENTS + "sensors = '1 %'\n"), "did you mean 'sensor'?"),
        (plan_text(rest="[plan.generation.'generation 3']\n"), "did you mean 'generation 2'?"),
        (plan_text(rest="[plan.means]\n"), "did you mean 'mean'?"),
        (plan_text(DESIGN + "kinds = ['cylic']\n"), "did you mean 'cyclic'?"),
        (plan_text(DESIGN + "direction = 'upp'\n"), "did you mean 'up'?"),
    ],
)
def test_an_unknown_word_is_named_with_the_nearest_known_one(text: str, near: str) -> None:
    assert near in {notice.remedy for notice in faults_of(text)}


def test_all_faults_are_named_at_once_each_once_and_with_its_line() -> None:
    text = plan_text(
        DESIGN.replace("modules = 6", "modulles = 6") + "levels = 1\n",
        COMPONENTS.replace("'1 %'", "'-1 %'"),
        "[recordings]\nname = '{module}'\n[limits]\nlinearity = '2 pF'\n[[earlier]]\nfolder = 'x'\n",
    )
    found = faults_of(text)
    assert len(set(found)) == len(found)
    lines = text.splitlines()
    at = sorted((lines[notice.line - 1].split(" ")[0], notice.code) for notice in found if notice.line)
    assert at == [
        ("[[earlier]]", "wrong-value"),
        ("[plan]", "value-missing"),
        ("[recordings]", "wrong-value"),
        ("levels", "wrong-type"),
        ("linearity", "wrong-unit"),
        ("module", "wrong-value"),
        ("modulles", "unknown-key"),
    ]


def test_a_file_without_a_plan_is_no_plan() -> None:
    assert [notice.what for notice in faults_of(HEAD)] == ["the file has no [plan]"]


def test_a_description_is_not_stopped_by_a_plan_that_could_not_be_rehearsed() -> None:
    description = read_description((HEAD + "[plan]\nmodules = 3\nlevels = [0, 10]\n").encode())
    assert description.plan == {"modules": 3, "levels": [0, 10]}
    assert description.planned is None
    assert read_description(plan_text().encode()).planned == planned(plan_text())


def test_a_rehearsal_is_simulated_as_well() -> None:
    description = read_description((HEAD + "rehearsal = true\n").encode())
    assert description.rehearsal
    assert description.simulated
    assert not read_description((HEAD + "simulated = true\n").encode()).rehearsal


def attempted(text: str) -> tuple[PlannedDesign | None, tuple[Notice, ...]]:
    """The design, or what stops it."""
    try:
        return read_plan_file(text.encode("utf-8", "surrogatepass"), "p.toml").planned, ()
    except CampaignStops as stops:
        return None, stops.notices


@given(st.text(max_size=60))
def test_any_text_among_the_keys_of_a_plan_stops_or_is_read(words: str) -> None:
    text = plan_text(DESIGN + words + "\n")
    description, notices = attempted(text)
    assert (description is None) == bool(notices)


VALUES = st.one_of(
    st.integers(-3, 3000),
    st.floats(allow_nan=False, allow_infinity=False, width=32),
    st.booleans(),
    st.sampled_from(['"1 %"', '"1 mm"', '"x"', '""', '["a"]', "[0, 0.1]", "[]", "{}", "{ zero = 1 }"]),
)


@given(
    st.sampled_from(
        ["generations", "modules", "levels", "kinds", "edges", "rest_length", "mean", "generation"]
    ),
    VALUES,
    st.sampled_from(["module", "sensor", "residual", "pressure", "seat"]),
    VALUES,
)
def test_any_value_stops_or_gives_a_plan_with_finite_numbers(
    key: str, value: object, part: str, spread: object
) -> None:
    def written(one: object) -> str:
        return str(one).lower() if isinstance(one, bool) else str(one)

    design = "".join(line + "\n" for line in DESIGN.splitlines() if not line.startswith(key))
    components = "".join(line + "\n" for line in COMPONENTS.splitlines() if not line.startswith(part))
    text = plan_text(f"{design}{key} = {written(value)}\n", f"{components}{part} = {written(spread)}\n")
    found, notices = attempted(text)
    assert (found is None) == bool(notices)
    for generation in found.generations if found is not None else ():
        numbers = [generation.sd_at(level, 0.2) for level in ("module", "sensor", "residual")]
        assert all(math.isfinite(number) and number >= 0.0 for number in (*numbers, generation.seat_mm))
    assert found is None or all(math.isfinite(level) for level in found.levels)
