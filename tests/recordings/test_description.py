"""``campaign.toml``: every key of the format is taken and checked, every fault named with its place."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from campaign.notices import CampaignStops, Notice
from campaign.recordings.description import Description
from campaign.recordings.description_file import load_description, read_description
from campaign.recordings.toml_tables import find_line, nearest

EVERY_KEY = """\
format = 1

[campaign]
title       = "Panels"
description = "Two processes"
licence     = "CC-BY-4.0"
date        = 2026-03-31
first_day   = "2026-03-01"
last_day    = 2026-03-20
simulated   = true
authors     = [{ name = "A. Author", affiliation = "Somewhere", orcid = "0000-0000-0000-0000" }]

[recordings]
files = ["trials/**/*.csv", "more/*.txt"]
name  = [
  "{module}_{sensor}_{kind}_r{repetition}",
  "{module}/{ignore}_{length}_{pressure}_{rate}_{temperature}",
]
separator = ";"
decimal = ","
encoding = "utf-16"
header_row = 14
split_where_time_restarts = true

[recordings.same]
generation = "first"
repetition = 2

[recordings.kinds]
cal = "staircase"

[[columns]]
header   = "stage_mm"
quantity = "length"
unit     = "cm"
along    = ["AB", "CD"]
offset   = "1.5 cm"

[[columns]]
position = 7
quantity = "signal"
unit     = "N"
thousands = "."
decimal  = ","
missing  = ["OVER", "-1e105"]
files    = "runs/seal_*.csv"
sensor   = "AB"
repetition = 3
node     = "A"

[[columns]]
header   = "C_{sensor} ({repetition})"
quantity = "signal"

[[columns]]
header   = "model *"
quantity = "ignore"

[[columns]]
header   = "when"
quantity = "time"
unit     = "timestamp"

[reference]
signal = { gain = 0.001, offset = "10 fF", resolution = "0.001 pF" }
node   = "0.1 mm"

[reference.length]
scale = "0.05 %"
zero = "50 µm"
backlash = "0.02 mm"
random = "0.01 mm"
certificate = "K 12"
calibrated = 2025-11-03

[readout]
instrument      = "meter"
frequency       = "100 kHz"
model           = "parallel"
delay           = "12 ms"
filter_time     = "50 ms"
open_correction = true

[use]
direction         = "unknown"
time_since_zero   = "8 h"
temperature_range = "10 K"
pressure          = "20 kPa"
rate              = "0.1 1/s"

[range]
strain = "40 %"
elongation = 4

[limits]
linearity      = "2 %FSO"
hysteresis     = "5 %FSO"
repeatability  = "1 %FSO"
drift_1h       = "1 %FSO"
strain_error   = "2 %"
pressure_error = "1 %FSO"
node_error     = "0.1 cm"

[limits.margins]
linearity = "0.5 %FSO"

[geometry.panel]
nodes  = { A = [0, 0], B = [90, 0], C = [90.5, 60] }
datum  = ["A", "B"]

[electrode]
resistance = "1.2 kohm"

[costs]
module     = 6
sensor     = 0.5
repetition = 0.4

[site]
plot_library = "plotly-basic.min.js"

[[earlier]]
folder = "../2025_first_process"

[plan]
generations = 2
modules = 6
sensors = 5
repetitions = 3
levels = [0, 10, 20.5]

[plan.components]
module = "2 %"
sensor = 0.01
"""


TIME_COLUMN = "[[columns]]\nheader = 'a'\nquantity = 'time'\n"


def faults_of(text: str) -> tuple[Notice, ...]:
    with pytest.raises(CampaignStops) as stops:
        read_description(text.encode())
    assert all(notice.weight == "stops" and notice.file == "campaign.toml" for notice in stops.value.notices)
    return stops.value.notices


def read(text: str) -> Description:
    return read_description(("format = 1\n[campaign]\ntitle = 't'\n" + text).encode())


@pytest.fixture(scope="module")
def everything() -> Description:
    return read_description(EVERY_KEY.encode())


def test_campaign_is_taken_as_written(everything: Description) -> None:
    assert (everything.title, everything.description) == ("Panels", "Two processes")
    assert (everything.date, everything.first_day, everything.last_day) == (
        "2026-03-31",
        "2026-03-01",
        "2026-03-20",
    )
    assert everything.authors[0].affiliation == "Somewhere"
    assert everything.simulated
    assert everything.text == EVERY_KEY
    assert everything.notices == ()


def test_recordings_are_taken_as_written(everything: Description) -> None:
    assert everything.files == ("trials/**/*.csv", "more/*.txt")
    assert len(everything.names) == 2
    assert (everything.separator, everything.decimal, everything.encoding) == (";", ",", "utf-16")
    assert everything.header_row == 14
    assert everything.split_where_time_restarts
    assert everything.same == {"generation": "first", "repetition": "2"}
    assert everything.kinds == {"cal": "staircase"}


def test_columns_are_taken_in_order_and_offsets_in_mm(everything: Description) -> None:
    stage, seal, wide, left_alone, _ = everything.columns
    assert (stage.unit, stage.along, stage.offset_mm) == ("cm", ("AB", "CD"), 15.0)
    assert (seal.position, seal.unit, seal.thousands, seal.decimal) == (7, "N", ".", ",")
    assert (seal.missing, seal.files) == (("OVER", "-1e105"), "runs/seal_*.csv")
    assert (seal.sensor, seal.repetition, seal.node) == ("AB", 3, "A")
    assert wide.header == "C_{sensor} ({repetition})"
    assert left_alone.quantity == "ignore"


def test_quantities_become_canonical(everything: Description) -> None:
    length = everything.length_reference
    assert (length.scale_relative, length.zero_mm, length.backlash_mm, length.random_mm) == (
        0.0005,
        0.05,
        0.02,
        0.01,
    )
    assert (length.certificate, length.calibrated) == ("K 12", "2025-11-03")
    signal = everything.signal_reference
    assert (signal.gain_relative, signal.offset, signal.resolution, signal.unit) == (0.001, 0.01, 0.001, "pF")
    assert everything.node_reference_mm == 0.1
    assert (everything.range_strain, everything.range_elongation_mm) == (0.4, 4.0)
    assert everything.electrode_resistance_ohm == 1200.0


def test_limits_carry_the_unit_that_they_are_judged_in(everything: Description) -> None:
    assert everything.limits["linearity"] == (2.0, "%FSO")
    assert everything.limits["strain_error"] == (0.02, "mm/mm")
    assert everything.limits["node_error"] == (1.0, "mm")
    assert everything.margins == {"linearity": (0.5, "%FSO")}


def test_the_rest_is_taken_as_written(everything: Description) -> None:
    assert everything.readout["open_correction"] == "true"
    assert everything.use["rate"] == "0.1 1/s"
    assert everything.geometries["panel"].nodes["C"] == (90.5, 60.0)
    assert everything.geometries["panel"].datum == ("A", "B")
    assert everything.costs == {"module": 6.0, "sensor": 0.5, "repetition": 0.4}
    assert everything.plot_library == "plotly-basic.min.js"
    assert everything.earlier == ({"folder": "../2025_first_process"},)
    assert everything.plan["levels"] == [0, 10, 20.5]


def test_what_is_not_given_is_not_a_number_never_zero() -> None:
    description = read("")
    assert not description.length_reference.stated
    assert math.isnan(description.signal_reference.offset)
    assert math.isnan(description.range_strain)
    assert description.files == ("trials/**/*.csv",)


@pytest.mark.parametrize(
    ("text", "line", "what", "nearest_known"),
    [
        ("format = 1\n[campaing]\ntitle = 'x'\n", 2, "campaing", "campaign"),
        ("format = 1\n[campaign]\ntitel = 'x'\n", 3, "titel", "title"),
        ("format = 1\n[recordings]\nfile = '*.csv'\n", 3, "file", "files"),
        ("format = 1\n[recordings.same]\nmodul = 'x'\n", 3, "modul", "module"),
        (f"format = 1\n\n{TIME_COLUMN}{TIME_COLUMN}units='s'\n", 9, "units", "unit"),
        ("format = 1\n[reference]\nlength = { zeros = '1 mm' }\n", 3, "zeros", "zero"),
        ("format = 1\n[limits]\nlineraity = '1 %FSO'\n", 3, "lineraity", "linearity"),
        ("format = 1\n[geometry.p]\nnodes = {A=[0,0]}\ndatums = []\n", 4, "datums", "datum"),
        ("format = 1\n[readout]\nfrequncy = '1 kHz'\n", 3, "frequncy", "frequency"),
    ],
)  # fmt: skip
def test_an_unknown_key_stops_with_the_nearest_known_one(
    text: str, line: int, what: str, nearest_known: str
) -> None:
    [fault] = faults_of(text)
    assert (fault.code, fault.line) == ("unknown-key", line)
    assert f"'{what}'" in fault.what
    assert f"'{nearest_known}'" in fault.remedy


@pytest.mark.parametrize(
    ("text", "line", "where"),
    [
        ("[reference]\nlength = '0.05 pF'\n", 5, "length"),
        ("[reference]\nlength = { zero = '1 s' }\n", 5, "zero"),
        ("[reference]\nnode = '0.1'\n", 5, "node"),
        ("[limits]\nlinearity = '2 mm'\n", 5, "linearity"),
        ("[limits]\nnode_error = '1 %FSO'\n", 5, "node_error"),
        ("[range]\nelongation = '40 kPa'\n", 5, "elongation"),
        ("[use]\ntime_since_zero = '8 mm'\n", 5, "time_since_zero"),
        ("[readout]\nfrequency = '100 pF'\n", 5, "frequency"),
        ("[electrode]\nresistance = '1 pF'\n", 5, "resistance"),
        ("[[columns]]\nheader = 'a'\nquantity = 'length'\nunit = 'pF'\n", 7, "unit"),
        ("[[columns]]\nheader = 'a'\nquantity = 'pressure'\nunit = 'kpa'\n", 7, "unit"),
    ],
)
def test_a_unit_of_the_wrong_family_stops(text: str, line: int, where: str) -> None:
    [fault] = faults_of("format = 1\n[campaign]\ntitle = 't'\n" + text)
    assert (fault.code, fault.line) == ("wrong-unit", line)
    assert where in fault.what


def test_a_unit_that_differs_in_case_only_comes_with_a_hint() -> None:
    [fault] = faults_of(
        "format=1\n[campaign]\ntitle='t'\n[[columns]]\nheader='a'\nquantity='pressure'\nunit='kpa'\n"
    )
    assert "kPa" in fault.what


def test_any_quantity_may_stand_as_the_signal() -> None:
    units = ["pF", "kΩ", "µH", "mV", "counts", "1", "N", "kPa", "mm", "%"]
    tables = "".join(
        f"[[columns]]\nposition = {i}\nquantity='signal'\nunit='{u}'\n" for i, u in enumerate(units, 1)
    )
    assert [rule.unit for rule in read(tables).columns] == units


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("[[columns]]\nheader = 'a'\nquantity = 'lenght'\n", "unknown-quantity"),
        ("[[columns]]\nheader = 'a'\n", "value-missing"),
        ("[[columns]]\nquantity = 'time'\n", "value-missing"),
        ("[[columns]]\nposition = 0\nquantity = 'time'\n", "wrong-type"),
        ("[[columns]]\nheader = 'C_{senor}'\nquantity = 'signal'\n", "wrong-pattern"),
        ("[[columns]]\nheader = 'a'\nquantity = 'time'\nthousands = 'x'\n", "wrong-value"),
        ("[recordings]\nname = '{modul}_{sensor}'\n", "wrong-pattern"),
        ("[recordings]\nname = '{module'\n", "wrong-pattern"),
        ("[recordings]\nname = 'fixed'\n", "wrong-pattern"),
        ("[recordings]\nfiles = '../elsewhere/*.csv'\n", "wrong-value"),
        ("[recordings]\nfiles = '/absolute/*.csv'\n", "wrong-value"),
        ("[recordings]\nfiles = '[z-a].csv'\n", "wrong-value"),
        ("[recordings]\nencoding = 'utf-9'\n", "wrong-value"),
        ("[recordings]\nseparator = 'x'\n", "wrong-value"),
        ("[recordings.kinds]\ncal = 'stairs'\n", "unknown-kind"),
        ("[reference]\nlength = '-1 mm'\n", "wrong-value"),
        ("[reference]\nlength = '1e9999 mm'\n", "wrong-unit"),
        ("[reference]\nlength = true\n", "wrong-type"),
        ("[range]\nstrain = 0\n", "wrong-value"),
        ("[use]\ndirection = 'sideways'\n", "unknown-direction"),
        ("[geometry.p]\nnodes = { A = [0] }\n", "wrong-type"),
        ("[geometry.p]\nnodes = { A = [0, 0] }\ndatum = ['A', 'B']\n", "wrong-value"),
        ("[geometry.p]\ndatum = []\n", "value-missing"),
        ("[costs]\nmodule = 'six'\n", "wrong-type"),
        ("[plan]\nlevels = 'many'\n", "wrong-type"),
        ("[plan]\nmodules = 0\n", "wrong-type"),
        ("[[earlier]]\n", "value-missing"),
        ('[[earlier]]\narchive = ""\n', "value-missing"),
        ('[[earlier]]\nfolder = "../a"\narchive = "a.zip"\n', "wrong-value"),
        ("[site]\nplot_library = 3\n", "wrong-type"),
    ],
)
def test_a_value_that_cannot_be_used_stops(text: str, code: str) -> None:
    faults = faults_of("format = 1\n[campaign]\ntitle = 't'\n" + text)
    assert [fault.code for fault in faults] == [code]
    assert all(fault.remedy for fault in faults)


def test_all_faults_are_named_at_once() -> None:
    text = EVERY_KEY.replace('"100 kHz"', '"100 mm"').replace("titel", "").replace("simulated", "simulatd")
    text = text.replace('"2 %FSO"', '"2 pF"').replace("frequency", "frequenzy")
    codes = sorted(fault.code for fault in faults_of(text))
    assert codes == ["unknown-key", "unknown-key", "wrong-unit"]


def test_one_value_alone_is_the_random_part_and_said_so() -> None:
    description = read("[reference]\nlength = '0.05 mm'\nsignal = '2 fF'\n")
    assert description.length_reference.random_mm == 0.05
    assert math.isnan(description.length_reference.zero_mm)
    assert (description.signal_reference.random, description.signal_reference.unit) == (0.002, "pF")
    assert [(n.code, n.weight, n.line) for n in description.notices] == [
        ("reference-one-value", "noted", 5),
        ("reference-one-value", "noted", 6),
    ]


def test_no_format_and_no_title_are_noted_and_the_folder_names_the_campaign(tmp_path: Path) -> None:
    (tmp_path / "campaign.toml").write_text("[recordings]\nfiles = '*.csv'\n")
    description = load_description(tmp_path)
    assert description.title == tmp_path.name
    assert [n.code for n in description.notices] == ["format-unstated", "no-title"]


def test_another_format_stops() -> None:
    assert [fault.code for fault in faults_of("format = 2\n")] == ["unknown-format"]


@pytest.mark.parametrize(
    ("text", "line", "column"),
    [
        ("format = 1\n[campaign\ntitle = 'x'\n", 2, 10),
        ("format = 1\nformat = 1\n", 2, 11),
        ('format = 1\n[campaign]\ntitle = "never closed\n', 3, 22),
    ],
)
def test_a_syntax_error_stops_with_its_line(text: str, line: int, column: int) -> None:
    [fault] = faults_of(text)
    assert (fault.code, fault.line, fault.column) == ("toml-syntax", line, column)


def test_a_file_that_is_no_utf8_stops_with_its_line(tmp_path: Path) -> None:
    (tmp_path / "campaign.toml").write_bytes("format = 1\n[campaign]\ntitle = 'Größe'\n".encode("cp1252"))
    with pytest.raises(CampaignStops) as stops:
        load_description(tmp_path)
    assert [(n.code, n.line) for n in stops.value.notices] == [("toml-encoding", 3)]


def test_a_byte_order_mark_and_windows_line_ends_are_no_fault() -> None:
    text = "format = 1\r\n[campaign]\r\ntitle = 'x'\r\n"
    assert read_description(b"\xef\xbb\xbf" + text.encode()).title == "x"


@pytest.mark.parametrize("make", [False, True])
def test_no_description_stops_and_names_the_way_out(tmp_path: Path, make: bool) -> None:
    folder = tmp_path / "some"
    if make:
        folder.mkdir()
    with pytest.raises(CampaignStops) as stops:
        load_description(folder)
    [notice] = stops.value.notices
    assert notice.code == "no-description"
    assert ("campaign begin" in notice.remedy) == make


def test_every_key_of_the_format_is_known_at_its_place(everything: Description) -> None:
    lines = EVERY_KEY.splitlines()
    for path, key, begins in [
        ((), "format", "format"),
        (("reference",), "node", "node"),
        (("reference", "length"), "zero", "zero"),
        (("limits", "margins"), "linearity", "linearity"),
        (("geometry", "panel"), "datum", "datum"),
    ]:
        line = find_line(EVERY_KEY, path, key)
        assert line is not None
        assert lines[line - 1].startswith(begins)
    assert lines[(find_line(EVERY_KEY, ("columns",), "position", 1) or 0) - 1] == "position = 7"


def test_the_nearest_word_is_found_whatever_its_case() -> None:
    assert nearest("Modul", ["module", "sensor"]) == "module"
    assert nearest("qqqq", ["module", "sensor"]) is None


def test_an_earlier_campaign_is_a_folder_or_an_archive():
    text = (
        'format = 1\n[campaign]\ntitle = "t"\n[[earlier]]\nfolder = "../a"\n[[earlier]]\narchive = "b.zip"\n'
    )
    assert read_description(text.encode()).earlier == ({"folder": "../a"}, {"archive": "b.zip"})


def test_margins_are_read_in_the_unit_of_the_limit_and_per_cent_else_is_a_ratio():
    text = (
        'format = 1\n[campaign]\ntitle = "t"\n[limits.margins]\n'
        'strain_error = "0.005"\nlinearity = "0.5 %FSO"\nslope = "10 %"\n'
    )
    assert read_description(text.encode()).margins == {
        "strain_error": (0.005, "mm/mm"),
        "linearity": (0.5, "%FSO"),
        "slope": (0.1, "1"),
    }
