"""An invented campaign of all kinds of trial in which every text that a lab may write is hostile.

What is measured is a small simulation; ids, file names, headers, registers, preambles, notes, the description
and the earlier campaign come from :mod:`tests.hostile_texts`.
"""

from __future__ import annotations

import csv
import io
import json
import unicodedata
from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import cycle
from pathlib import Path

import numpy as np

from campaign.simulation.demo import NODES, demo_plan, demo_truth
from campaign.simulation.plan import Batch, Generation, Plan, StaircasePlan
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.recordings import simulate_recordings
from campaign.simulation.trial_plans import HoldPlan
from tests.hostile_texts import (
    ADDRESSES,
    FORMULAS,
    IDS,
    MARKUP,
    NAMES,
    NUL,
    REFUSED,
    TEMPLATES,
    TEXTS,
    UNSEEN,
)

SEED = 20250811
MODULES = ("M01", "M02", "M03", "M04", "M05", "M06")
WORDS = {"cal": "<i>cal</i>", "loop": "loop", "hold": "hold", "inflate": "{{inflate}}", "warm": "warm"}
"""The lab's own words for kinds; layout keeps its name."""
FRAME = "frame<b>"
NODE_IDS = {"A": "<b>A</b>", "B": "B\"'", "C": "__proto__", "D": "节 D"}
PNG = b"\x89PNG\r\n\x1a\n" + b"\0" * 20


@dataclass(frozen=True)
class HostileIds:
    """Ids of the campaign by those of the plan.

    Attributes
    ----------
    modules, generations, sessions
        Hostile id by plain id.
    sensors
        Hostile id by plain module and place.
    """

    modules: dict[str, str]
    generations: dict[str, str]
    sessions: dict[str, str]
    sensors: dict[tuple[str, str], str]


def hostile_plan() -> Plan:
    """Return the design: two generations of three panels, six sensors each, all kinds, all short."""
    given = demo_plan()
    assert given.cyclic is not None
    assert given.pressure is not None
    assert given.thermal is not None
    assert given.layout is not None
    held = tuple((module, "AB") for module in ("M01", "M04"))
    return replace(
        given,
        generations=(
            Generation("g1", (Batch("b1", MODULES[:3]),)),
            Generation("g2", (Batch("b2", MODULES[3:]),)),
        ),
        sessions=("2",),
        repetitions=2,
        staircase=StaircasePlan((0.0, 0.1, 0.2, 0.3, 0.4), True, dwell_s=5.0, sample_period_s=1.0),
        shared_runs=True,
        omitted=frozenset(),
        cyclic=replace(given.cyclic, positions=("AB",), cycles=5, samples_a_cycle=24, repetitions=1),
        holds=(HoldPlan(held, strain=0.2, duration_s=600.0, session="2"),),
        pressure=replace(given.pressure, missing=frozenset(), leg_s=20.0, repetitions=1),
        thermal=replace(given.thermal, modules=("M01", "M04"), leg_s=300.0, repetitions=1),
        layout=replace(given.layout, missing=frozenset()),
    )


def hostile_ids(plan: Plan) -> HostileIds:
    """Return an id of :data:`IDS` for every module and sensor, all of them used."""
    named = [IDS["script"], IDS["device"], IDS["device_lower"], IDS["attribute"], IDS["proto"], IDS["long"]]
    texts = cycle(dict.fromkeys(IDS.values()))
    sensors = {(m, place.position): next(texts) for m in plan.modules for place in plan.places}
    return HostileIds(
        modules=dict(zip(MODULES, named, strict=True)),
        generations={"g1": MARKUP["image"], "g2": "{{ 7*191 }} 第二"},
        sessions={"1": MARKUP["single_quote"], "2": "../2", "F": FRAME},
        sensors=sensors,
    )


def write_hostile_campaign(folder: Path) -> Path:
    """Write the campaign's folder, with an earlier campaign beside its recordings, and return it."""
    plan = hostile_plan()
    ids = hostile_ids(plan)
    folder.mkdir(parents=True)
    rows = list(_write_recordings(folder, plan, ids))
    rows += list(_write_refused(folder))
    _write_csv(folder / "trials.csv", [*_TRIALS, TEXTS["script"]], rows)
    _write_registers(folder, plan, ids)
    _write_notes(folder / "notes")
    _write_earlier(folder / "earlier <b>&\"'")
    (folder / "campaign.toml").write_text(_description(), encoding="utf-8")
    return folder


def is_portable(name: str) -> bool:
    """Whether a file may be called so in an archive that is to be unpacked anywhere."""
    return not any(c in "/\\" or unicodedata.category(c) in ("Cc", "Cf", "Co", "Zl", "Zp") for c in name)


_TRIALS = ("file", "kind", "module", "sensor", "repetition", "session", "channel", "use", "reason")


def _write_recordings(folder: Path, plan: Plan, ids: HostileIds) -> Iterator[list[str]]:
    names = cycle(text for text in TEXTS.values() if is_portable(text))
    channels = cycle(TEXTS.values())
    aside = cycle(TEXTS.values())
    for number, recording in enumerate(simulate_recordings(plan, demo_truth(), SEED)):
        said = dict(recording.preamble)
        module, place = said["module"], said.get("sensor", "")
        stem = recording.file.rsplit("/", 1)[1].removesuffix(".csv")
        kind, repetition, session = stem.split("_")[-3:]
        name = f"trials/{number:02d} {next(names)[:90]}.csv"
        path = folder / name
        path.parent.mkdir(exist_ok=True)
        path.write_bytes(_recording_bytes(recording, module, ids, next(channels)))
        sensor = ids.sensors[module, place] if place else ""
        use = ["no", next(aside)] if kind == "cal" and number % 9 == 0 else ["", ""]
        own = [WORDS.get(kind, kind), ids.modules[module], sensor, repetition[1:], ids.sessions[session[1:]]]
        yield [name, *own, next(channels), *use, next(channels)]


def _recording_bytes(recording: SyntheticRecording, module: str, ids: HostileIds, remark: str) -> bytes:
    stream = io.StringIO()
    one_line = "".join(c for c in remark if c not in "\n\r\0")
    stream.write(f"# remark: {one_line}\n# {one_line}\n")
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([_header(column.header, module, ids) for column in recording.columns])
    writer.writerows(zip(*(column.texts(".") for column in recording.columns), strict=True))
    return stream.getvalue().encode("utf-8")


def _header(header: str, module: str, ids: HostileIds) -> str:
    """Name a column's sensor or node as the hostile campaign does."""
    first, *rest = header.split("_")
    if first in NODES and rest:
        return "_".join([NODE_IDS[first], *rest])
    if len(rest) == 2 and (module, rest[0]) in ids.sensors:
        return f"{first}_{ids.sensors[module, rest[0]]}_{rest[1]}"
    return header


def _write_refused(folder: Path) -> Iterator[list[str]]:
    """Write recordings whose ids are refused, at every door that can name one, and files that are broken."""
    table = "time_s,stage_mm,capacitance_pF\n" + "".join(
        f"{t},{60 + t // 9},{80 + t // 9}\n" for t in range(36)
    )
    (folder / "trials" / "refused").mkdir()
    for number, (name, text) in enumerate(REFUSED.items()):
        file = f"trials/refused/{name}.csv"
        # a blank at the beginning is no part of an id, and no row may be the same run as another
        (folder / file).write_text(f"# {number}\n{table}", encoding="utf-8")
        places = [[text, "S"], ["module", text]][number % 2]
        yield [file, "hold", *places, "1", "", "", "", "", ""]
        said = "".join(c for c in text.strip() if c not in "\r\n\u2028\u2029\x1b\x07")
        preamble = f"# module: {said}\n# sensor: S\n# kind: hold\n# {number}\n"
        (folder / f"trials/refused/preamble {name}.csv").write_text(preamble + table, encoding="utf-8")
    for number, text in enumerate(TEXTS.values()):
        broken = (
            f"time_s,stage_mm,{_quoted(text)},capacitance_pF\n0,60,{_quoted(text)},{_quoted(text)}\n1,60,1\n"
        )
        (folder / f"trials/broken {number}.csv").write_text(broken, encoding="utf-8", newline="\n")
    (folder / "=cmd.csv").write_text(table, encoding="utf-8")
    (folder / "@SUM(1).txt").write_text(table, encoding="utf-8")


def _quoted(text: str) -> str:
    return '"' + text.replace('"', '""').replace("\r", " ").replace("\n", " ") + '"'


def _write_registers(folder: Path, plan: Plan, ids: HostileIds) -> None:
    free = cycle(TEXTS.values())
    modules = [
        [
            ids.modules[m],
            ids.generations[g.name],
            MARKUP["entity"],
            "panel<b>",
            next(free),
            next(free),
            next(free),
        ]
        for g in plan.generations
        for m in g.modules
    ]
    modules += [[text, "=x", "", "", "", "", ""] for text in REFUSED.values()]
    head = ["module", "generation", "batch", "geometry", "materials", "cure", TEXTS["attribute"]]
    _write_csv(folder / "modules.csv", head, modules)
    rows = []
    for module in plan.modules:
        for place in plan.places:
            nodes = [NODE_IDS[place.start], NODE_IDS[place.end]]
            sensor = ids.sensors[module, place.position]
            position = f"{MARKUP['script']} {place.position}"
            length = f"{place.rest_length_mm:.2f}"
            rows.append([ids.modules[module], sensor, position, *nodes, length, "0.1", next(free), "", ""])
    rows += [[ids.modules["M01"], t, t, t, t, t, t, t, f"set aside {t}", t] for t in FORMULAS.values()]
    beside = [FORMULAS["equals"], FORMULAS["at"], UNSEEN["override"]]
    rows.append([ids.modules["M01"], "spare", *beside, "60", "0.1", FORMULAS["plus"], "", ""])
    head = ["module", "sensor", "position", "from", "to", "rest_length", "rest_length_uncertainty"]
    _write_csv(folder / "sensors.csv", [*head, "rest_length_method", "fate", "reason"], rows)
    sessions = [
        [ids.sessions[s], ids.modules[m], f"2025-03-0{n}T08:00:00", *(next(free) for _ in range(4))]
        for m in plan.modules
        for n, s in enumerate(ids.sessions, 1)
    ]
    head = ["session", "module", "started", "stand", "grip", "temperature", "operator"]
    _write_csv(folder / "sessions.csv", head, sessions)


def _write_csv(path: Path, header: list[str], rows: list[list[str]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n", quoting=csv.QUOTE_ALL)
        writer.writerow(header)
        writer.writerows(rows)


def _write_notes(folder: Path) -> None:
    (folder / "sub <b>").mkdir(parents=True)
    groups = {"markup": MARKUP, "addresses": ADDRESSES, "templates": TEMPLATES, "formulas": FORMULAS}
    groups |= {"unseen <b>": UNSEEN | {"nul": NUL}, "sub <b>/names": NAMES}
    for name, texts in groups.items():
        body = f"# {next(iter(texts.values()))} {NUL}\n\n" + "".join(map(note_of, texts.values()))
        (folder / f"{name}.md").write_text(body, encoding="utf-8", newline="")
    (folder / "picture.png").write_bytes(PNG)
    (folder / "sub <b>" / "picture.png").write_bytes(PNG)
    for name in ("device", "device_lower", "chinese", "proto"):
        (folder / f"{NAMES[name]}.md").write_text(f"{name}: a note with no heading", encoding="utf-8")
    (folder / "climbs.md").symlink_to("../campaign.toml")


def note_of(text: str) -> str:
    """Return Markdown in which a text stands wherever a note can hold one."""
    address = text.replace("\n", " ")
    return (
        f"## {text}\n\n{text}\n\n- [{text}]({address})\n- [a](<{address}>)\n- ![{text}](<{address}>)\n"
        f'- ![p](picture.png "{text}")\n\n`{text}`\n\n{text} | b\n--|--\n{text} | 1\n\n'
        f'[r]: {address} "{text}"\n[c][r] <{address}>\n\n'
    )


def _write_earlier(folder: Path) -> None:
    """Write a small campaign of hostile names, to be compared with."""
    (folder / "trials").mkdir(parents=True)
    draw = np.random.default_rng(SEED)
    rows, sensors = [], []
    for number, module in enumerate((IDS["image"], IDS["attribute"], IDS["jinja"])):
        for place in ("AB", "BC"):
            sensors.append([module, IDS["svg"] + place, "60"])
            own = draw.normal(0.0, 1.0, 2)
            for run in (1, 2):
                name = f"trials/{number}{place}{run}.csv"
                line = [
                    f"{60 + 6 * step},{80 + own[0] + (8 + 0.1 * own[1]) * step + draw.normal(0, 0.05):.4f}"
                    for step in range(5)
                ]
                (folder / name).write_text("\n".join(["x_mm,C", *line, ""]), encoding="utf-8")
                rows.append([name, "staircase", module, IDS["svg"] + place, str(run)])
    _write_csv(folder / "trials.csv", ["file", "kind", "module", "sensor", "repetition"], rows)
    _write_csv(folder / "sensors.csv", ["module", "sensor", "rest_length"], sensors)
    title = json.dumps(TEXTS["script"] + TEXTS["latex"])
    (folder / "campaign.toml").write_text(
        f"format = 1\n[campaign]\ntitle = {title}\n"
        f"[recordings.same]\ngeneration = {json.dumps(MARKUP['svg'])}\n"
        '[[columns]]\nheader = "x_mm"\nquantity = "length"\nunit = "mm"\n'
        '[[columns]]\nheader = "C"\nquantity = "signal"\nunit = "pF"\n[range]\nstrain = 0.4\n',
        encoding="utf-8",
    )


def _toml(text: str) -> str:
    """Return *text* as a basic TOML string; controls are escaped, others stand as they are."""
    escaped = text.replace("\\", "\\\\").replace('"', '\\"')
    return '"' + "".join(c if ord(c) >= 32 and ord(c) != 127 else f"\\u{ord(c):04x}" for c in escaped) + '"'


def _description() -> str:
    everything = " ".join(TEXTS.values()) + NUL
    title = f"{MARKUP['closes_title']} {TEXTS['jinja']} {TEXTS['override']}{NUL} {TEXTS['latex']}"
    authors = ", ".join(
        f"{{ name = {_toml(text)}, affiliation = {_toml(text)} }}" for text in TEXTS.values() if text.strip()
    )
    nodes = {NODE_IDS[name]: place for name, place in NODES.items()}
    places = ", ".join(f"{_toml(name)} = [{x}, {y}]" for name, (x, y) in nodes.items())
    kinds = {"cal": "staircase", "loop": "cyclic", "inflate": "pressure", "warm": "thermal"}
    return f"""format = 1
[campaign]
title = {_toml(title)}
description = {_toml(everything)}
licence = {_toml(MARKUP["attribute"])}
simulated = true
authors = [{authors}]
date = 2025-03-10

[recordings]
files = ["trials/**/*.csv", "=*.csv", "@*.txt"]

[recordings.kinds]
{chr(10).join(f"{_toml(WORDS[word])} = {_toml(kind)}" for word, kind in kinds.items())}

[[columns]]
header = "stage_mm"
quantity = "length"
unit = "mm"

[[columns]]
header = "capacitance_pF"
quantity = "signal"
unit = "pF"
missing = ["OVER", {_toml(MARKUP["script"])}]

[[columns]]
header = "stage_{{sensor}}_mm"
quantity = "length"
unit = "mm"

[[columns]]
header = "capacitance_{{sensor}}_pF"
quantity = "signal"
unit = "pF"

[[columns]]
header = "{{node}}_x_mm"
quantity = "node_x"
unit = "mm"

[[columns]]
header = "{{node}}_y_mm"
quantity = "node_y"
unit = "mm"

[[columns]]
header = "pressure_kPa"
quantity = "pressure"
unit = "kPa"

[[columns]]
header = "ambient_C"
quantity = "temperature"
unit = "°C"

[reference]
length = {{ scale = "0.0003", zero = "0.03 mm", random = "0.004 mm", certificate = {_toml(MARKUP["svg"])} }}
signal = {{ gain = "0.0005", offset = "0.01 pF", resolution = "0.001 pF" }}
node = "0.1 mm"

[readout]
instrument = {_toml(MARKUP["image"])}

[use]
time_since_zero = "8 h"
temperature_range = "4 K"
pressure = "20 kPa"

[range]
strain = 0.40

[limits]
linearity = "2 %FSO"
hysteresis = "3 %FSO"
repeatability = "1 %FSO"
drift_1h = "2 %FSO"
pressure_error = "5 %FSO"
strain_error = "0.02"
node_error = "3 mm"

[geometry."panel<b>"]
nodes = {{ {places} }}
datum = [{_toml(NODE_IDS["A"])}, {_toml(NODE_IDS["B"])}]

[costs]
module = 7
sensor = 0.6
repetition = 0.15

[[earlier]]
folder = {_toml("earlier <b>&" + chr(34) + chr(39))}
"""
