"""``[plan]`` of a description: the design and the assumed spread of a campaign that is not yet measured."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations, pairwise
from math import dist

from campaign.notices import Notice
from campaign.recordings.description import Geometry
from campaign.recordings.planned_design import (
    LINE_LEVELS,
    REHEARSED_KINDS,
    PlannedDesign,
    PlannedGeneration,
    PlannedLine,
    PlannedPlace,
)
from campaign.recordings.register import refusal_of_id, shown
from campaign.recordings.toml_tables import CheckedTable, FaultList, suggestion
from campaign.units import UnitError, parse_quantity

USUAL_LEVELS, USUAL_RANGE = 9, 0.40
USUAL_REST_LENGTH_MM = 80.0
USUAL_SIGNAL_PF, USUAL_GAUGE_FACTOR = 100.0, 1.0
NOISE_SHARE = 0.2
"""What is taken where a plan does not say: levels and range, rest length, mean line, noise over residual."""

MOST: Mapping[str, int] = {
    "generations": 10,
    "modules": 200,
    "sensors": 200,
    "sessions": 20,
    "repetitions": 50,
    "levels": 50,
}
"""Largest numbers that are taken for meant."""

MOST_RUNS = 5_000
"""Largest number of staircases of a rehearsal."""

LARGEST_STRAIN = 3.0
"""Largest level that is taken for meant, in mm/mm."""

FORM_CODES = frozenset({"unknown-key", "wrong-type", "wrong-unit", "unknown-kind", "unknown-direction"})
"""Faults that stop any description; the others stop a rehearsal only."""

SPREAD_FAMILIES = ("ratio", "strain", "length", "capacitance")

_WHOLE = ("modules", "sensors", "repetitions", "sessions", "batches")
_NEEDED = ("module", "sensor", "repetition", "residual")
_NEEDED_BY_KIND = {"pressure": "pressure", "hold": "relaxation"}


_NOT_IN_A_PLAN: Mapping[str, str] = {
    "recordings": "the rehearsal's recordings have names of their own",
    "columns": "the rehearsal's recordings have columns of their own",
    "earlier": "what is invented is not compared with what was measured",
    "site": "name the plot library in the rehearsal's own description",
}


def check_plan_file(top: CheckedTable) -> None:
    """Add faults to the top of a file that is to be rehearsed: no plan, or tables that belong in no plan."""
    if "plan" not in top.values:
        remedy = "write [plan] with generations, modules, sensors, repetitions, and [plan.components]"
        top.faults.add("value-missing", "the file has no [plan]", remedy)
    for key, why in _NOT_IN_A_PLAN.items():
        if key in top.values:
            what = f"[{key}] does not belong in a plan: {why}"
            top.faults.add("wrong-value", what, "leave it out", top.line(key))


def read_plan(
    plan: CheckedTable, geometries: Mapping[str, Geometry], range_strain: float
) -> tuple[PlannedDesign | None, tuple[Notice, ...]]:
    """Read ``[plan]`` with all its tables.

    Parameters
    ----------
    plan
        The table; nothing is added to its faults.
    geometries
        Of the same file; the one of them, if any, gives the sensors' places.
    range_strain
        Full scale in mm/mm, for levels that are only counted; NaN where not stated.

    Returns
    -------
    tuple
        The design, ``None`` with any fault; and all faults, each once.
    """
    faults = FaultList(plan.faults.file, plan.faults.text, done=plan.faults.done)
    table = CheckedTable(plan.values, faults, plan.path)
    counts = {key: _count(table, key) for key in _WHOLE}
    generations = _read_names(table)
    kinds = _read_kinds(table)
    levels = _read_levels(table, range_strain)
    way = table.choice("direction", ("up", "up and down"), "direction")
    places, geometry = _read_places(table, counts["sensors"], geometries, "layout" in kinds)
    design = PlannedDesign(
        generations=_read_generations(table, generations, kinds, counts, places),
        modules=counts["modules"] or 1,
        batches=counts["batches"] or 0,
        places=places,
        sessions=counts["sessions"] or 1,
        repetitions=counts["repetitions"] or 1,
        levels=levels,
        descending=way != "up",
        kinds=kinds,
        geometry=geometry,
    )
    _check_size(table, design)
    table.finish()
    found = tuple(dict.fromkeys(faults.notices))
    return (None if found else design), found


def _count(table: CheckedTable, key: str) -> int | None:
    value = table.whole_number(key)
    if key in ("modules", "sensors", "repetitions") and key not in table.values:
        table.fault("value-missing", key, "is not stated", f"write {key} = 3")
    if value is not None and value > MOST.get(key, MOST["modules"]):
        table.fault("wrong-value", key, f"{value} is more than a rehearsal runs", "write a smaller number")
        return None
    return value


def _read_names(table: CheckedTable) -> tuple[str, ...]:
    """Read the generations: their number, or their names."""
    value = table.values.get("generations")
    if isinstance(value, list):
        names = table.texts("generations")
        if len(names) == 0 or len(set(names)) < len(names) or not all(name.strip() for name in names):
            what = "names are missing, empty or repeated"
            table.fault("wrong-value", "generations", what, 'write generations = ["first", "second"]')
        for name in names:
            if refused := refusal_of_id(name):
                remedy = "name generations by letters, digits and hyphens"
                table.fault("wrong-value", "generations", f"'{shown(name)}' {refused}", remedy)
    else:
        number = table.whole_number("generations")
        if value is None:
            table.fault("value-missing", "generations", "is not stated", "write generations = 2")
        names = tuple(f"generation {index + 1}" for index in range(min(number or 1, MOST["generations"] + 1)))
    if len(names) > MOST["generations"]:
        what = f"more than {MOST['generations']} generations"
        table.fault("wrong-value", "generations", what, "write a smaller number")
    return names


def _read_kinds(table: CheckedTable) -> tuple[str, ...]:
    kinds = table.texts("kinds")
    for kind in kinds:
        if kind not in REHEARSED_KINDS:
            what = f"'{kind}' is no kind that can be rehearsed"
            table.fault("unknown-kind", "kinds", what, suggestion(kind, REHEARSED_KINDS))
    return tuple(kind for kind in REHEARSED_KINDS if kind == "staircase" or kind in kinds)


def _read_levels(table: CheckedTable, range_strain: float) -> tuple[float, ...]:
    """Read levels: their number, equally spaced over the range, or the strains themselves."""
    value = table.take("levels")
    if value is None or (isinstance(value, int) and not isinstance(value, bool)):
        number = USUAL_LEVELS if value is None else value
        if not 2 <= number <= MOST["levels"]:
            what = f"{number} is no number of levels"
            code = "wrong-type" if number < 2 else "wrong-value"
            table.fault(code, "levels", what, f"write 2 to {MOST['levels']}, such as levels = 9")
            return (0.0, USUAL_RANGE)
        top = range_strain if range_strain == range_strain else USUAL_RANGE
        return tuple(top * index / (number - 1) for index in range(number))
    strains = _strains(table, value)
    if not strains:
        return (0.0, USUAL_RANGE)
    rising = all(low < high for low, high in pairwise(strains))
    if len(strains) < 2 or not rising or strains[0] < 0 or len(strains) > MOST["levels"]:
        what = "levels are not two or more strains from zero on, each above the one before"
        table.fault("wrong-value", "levels", what, "write levels = [0, 0.1, 0.2]")
    elif strains[-1] > LARGEST_STRAIN:
        what = f"a level of {strains[-1]:g} mm/mm is {100 * strains[-1]:g} % strain"
        table.fault("wrong-value", "levels", what, 'write 0.2 or "20 %" for a fifth')
    return strains


def _strains(table: CheckedTable, value: object) -> tuple[float, ...]:
    """Return strains in mm/mm from numbers or texts with a unit; empty, with a fault, for anything else."""
    strains = []
    for item in value if isinstance(value, list) else []:
        if isinstance(item, bool) or not isinstance(item, int | float | str):
            break
        try:
            strains.append(parse_quantity(item, ("strain",)).value if isinstance(item, str) else float(item))
        except UnitError as fault:
            table.fault("wrong-unit", "levels", str(fault), 'write a strain, such as 0.2 or "20 %"')
            return ()
    if not isinstance(value, list) or len(strains) < len(value):
        what = f"{value!r} is neither a count nor a list of numbers"
        table.fault("wrong-type", "levels", what, "write levels = 8")
        return ()
    return tuple(strains)


# ---------------------------------------------------------------- places


def _read_places(
    table: CheckedTable, sensors: int | None, geometries: Mapping[str, Geometry], layout: bool
) -> tuple[tuple[PlannedPlace, ...], str]:
    rest_mm = table.quantity("rest_length", ("length",), bare_unit="mm", default=USUAL_REST_LENGTH_MM)
    if not 1.0 <= rest_mm <= 10_000.0:
        what = f"{rest_mm:g} mm is no length of a sensor"
        table.fault("wrong-value", "rest_length", what, 'write rest_length = "80 mm"')
        rest_mm = USUAL_REST_LENGTH_MM
    plain = tuple(PlannedPlace(f"S{index + 1}", rest_mm) for index in range(sensors or 1))
    joined = _read_edges(table)
    if not geometries:
        if layout:
            remedy = "state the nodes in [geometry.panel]"
            table.fault("value-missing", "kinds", "layouts need a geometry", remedy)
        if joined:
            table.fault("value-missing", "edges", "join nodes of no geometry", "state [geometry.panel]")
        return plain, ""
    name, geometry = next(iter(geometries.items()))
    if len(geometries) > 1:
        what = f"of {len(geometries)} geometries a rehearsal takes one"
        table.fault("wrong-value", "sensors", what, "leave the others out")
    if "rest_length" in table.values:
        table.fault("wrong-value", "rest_length", f"[geometry.{name}] gives the lengths", "leave it out")
    edges = joined or tuple(combinations(geometry.nodes, 2))
    return _joined_places(table, sensors, name, geometry, edges) or plain, name


_IN_FILE_NAMES = re.compile(r"[^\W_](?:[^\W_]|-){0,11}")


def _read_edges(table: CheckedTable) -> tuple[tuple[str, str], ...]:
    value = table.take("edges")
    if value is None:
        return ()
    edges = []
    for pair in value if isinstance(value, list) else [None]:
        if not isinstance(pair, list) or len(pair) != 2 or not all(isinstance(node, str) for node in pair):
            what = f"{value!r} is no list of pairs of nodes"
            table.fault("wrong-type", "edges", what, 'write edges = [["A", "B"], ["B", "C"]]')
            return ()
        edges.append((str(pair[0]), str(pair[1])))
    return tuple(edges)


def _joined_places(
    table: CheckedTable,
    sensors: int | None,
    name: str,
    geometry: Geometry,
    edges: Sequence[tuple[str, str]],
) -> tuple[PlannedPlace, ...]:
    unknown = [node for edge in edges for node in edge if node not in geometry.nodes]
    if unknown:
        what = f"[geometry.{name}] has no node '{unknown[0]}'"
        table.fault("wrong-value", "edges", what, suggestion(unknown[0], tuple(geometry.nodes)))
        return ()
    if wrong := [node for edge in edges for node in edge if not _IN_FILE_NAMES.fullmatch(node)]:
        what = f"[geometry.{shown(name)}] has a node '{shown(wrong[0])}', which would be part of file names"
        remedy = "name nodes by letters, digits and hyphens, at most twelve"
        table.fault("wrong-value", "edges", what, remedy)
        return ()
    if sensors is not None and len(edges) != sensors:
        what = (
            f"{sensors} sensors, but {len(edges)} edges"
            if "edges" in table.values
            else (f"{sensors} sensors, but [geometry.{name}] has {len(edges)} pairs of nodes")
        )
        remedy = 'say in edges which nodes they join: edges = [["A", "B"], …]'
        table.fault("wrong-value", "sensors", what, remedy)
        return ()
    lengths = [dist(geometry.nodes[start], geometry.nodes[end]) for start, end in edges]
    if len(set(map(frozenset, edges))) < len(edges) or min(lengths, default=0.0) <= 0.0:
        table.fault("wrong-value", "edges", "an edge is stated twice or has no length", "state each once")
        return ()
    return tuple(
        PlannedPlace(f"{start}{end}", length, start, end)
        for (start, end), length in zip(edges, lengths, strict=True)
    )


# ---------------------------------------------------------------- generations


@dataclass(frozen=True)
class _Layers:
    """The tables in which a value may stand: the generation's own, then that of all."""

    tables: tuple[CheckedTable, ...]

    def holder(self, key: str) -> CheckedTable | None:
        """The table that states *key*; every table knows the key then."""
        for table in self.tables:
            table.take(key)
        return next((table for table in self.tables if key in table.values), None)


def _read_generations(
    plan: CheckedTable,
    names: Sequence[str],
    kinds: Sequence[str],
    counts: Mapping[str, int | None],
    places: Sequence[PlannedPlace],
) -> tuple[PlannedGeneration, ...]:
    common = plan.table("components"), plan.table("mean")
    if "components" not in plan.values:
        remedy = 'write [plan.components] with module = "1 %" and the like'
        plan.fault("value-missing", "components", "are not stated", remedy)
    owned = plan.table("generation")
    needed = [*_NEEDED, *(_NEEDED_BY_KIND[kind] for kind in kinds if kind in _NEEDED_BY_KIND)]
    needed += ["batch"] if counts["batches"] else []
    needed += ["session"] if (counts["sessions"] or 1) > 1 else []
    rest_mm = sum(place.rest_length_mm for place in places) / len(places)
    found = []
    for name in names:
        own = owned.table(name) if owned is not None else None
        mine = (own.table("components"), own.table("mean")) if own is not None else (None, None)
        components, mean = (
            _Layers(tuple(t for t in pair if t is not None)) for pair in zip(mine, common, strict=True)
        )
        if components.tables:
            _check_needed(components, needed)
        found.append(_read_generation(name, components, mean, rest_mm))
        for table in (own, *mine):
            if table is not None:
                table.finish()
    for table in (owned, *common):
        if table is not None:
            table.finish()
    return tuple(found)


def _check_needed(components: _Layers, needed: Sequence[str]) -> None:
    last = components.tables[-1]
    for key in needed:
        if components.holder(key) is None:
            remedy = f'write {key} = "1 %" (an SD in strain), or 0'
            last.fault("value-missing", key, "is not stated", remedy)


def _read_generation(name: str, components: _Layers, mean: _Layers, rest_mm: float) -> PlannedGeneration:
    signal = _positive(mean, "signal", ("capacitance",), "pF", USUAL_SIGNAL_PF)
    gauge_factor = _positive(mean, "gauge_factor", ("ratio", "number"), "1", USUAL_GAUGE_FACTOR)
    units = {"length": 1.0 / rest_mm, "pF": 1.0 / (signal * gauge_factor)}

    def spread(key: str, default: float = 0.0) -> float:
        table = components.holder(key)
        return default if table is None else _strain(table, key, units)

    lines = {level: _line(components.holder(level), level, units) for level in LINE_LEVELS}
    residual = spread("residual")
    return PlannedGeneration(
        name=name,
        signal_pf=signal,
        gauge_factor=gauge_factor,
        sensor_by_level=spread("sensor_by_level"),
        residual=residual,
        noise=spread("noise", NOISE_SHARE * residual),
        hysteresis=spread("hysteresis"),
        hysteresis_sd=spread("hysteresis_sd"),
        pressure=spread("pressure"),
        pressure_sd=spread("pressure_sd"),
        relaxation=spread("relaxation"),
        seat_mm=spread("seat") * rest_mm,
        **lines,
    )


def _positive(layers: _Layers, key: str, families: tuple[str, ...], bare: str, default: float) -> float:
    table = layers.holder(key)
    value = default if table is None else table.quantity(key, families, bare_unit=bare, default=default)
    if not 0.0 < value < 1e9:
        if table is not None and value == value:
            table.fault("wrong-value", key, f"{value:g} is not above zero, or out of all bounds", "mend it")
        return default
    return value


def _line(table: CheckedTable | None, key: str, units: Mapping[str, float]) -> PlannedLine:
    """Read the spread of a line: one SD for all strains, or a table of zero, slope and correlation."""
    if table is None:
        return PlannedLine()
    if not isinstance(table.values[key], dict):
        return PlannedLine(zero=_strain(table, key, units))
    parts = table.table(key)
    assert parts is not None
    zero = _strain(parts, "zero", units) if "zero" in parts.values else 0.0
    slope = _within(parts, "slope", parts.quantity("slope", ("ratio",), bare_unit="1", default=0.0))
    correlation = parts.number("correlation", 0.0)
    if abs(correlation) > 1.0:
        parts.fault("wrong-value", "correlation", f"{correlation:g} lies outside −1 to 1", "mend it")
        correlation = 0.0
    parts.take("zero")
    parts.finish()
    return PlannedLine(zero, slope, correlation)


def _strain(table: CheckedTable, key: str, units: Mapping[str, float]) -> float:
    """Take an SD as strain; one in mm is divided by the rest length, one in pF by the mean slope."""
    value, unit = table.quantity_and_unit(key, SPREAD_FAMILIES, bare_unit="mm/mm", default=0.0)
    scale = {"mm": units["length"], "pF": units["pF"]}.get(unit, 1.0)
    return _within(table, key, value * scale)


def _within(table: CheckedTable, key: str, value: float) -> float:
    if value != value:
        return 0.0
    if not 0.0 <= value <= 1.0:
        what = f"{100 * value:g} % in strain is negative or more than all of it"
        table.fault("wrong-value", key, what, 'write an SD such as "1 %" or 0.01')
        return 0.0
    return value


def _check_size(table: CheckedTable, design: PlannedDesign) -> None:
    if design.batches > design.modules:
        what = f"{design.batches} batches of {design.modules} modules"
        table.fault("wrong-value", "batches", what, "write at most one batch a module")
    runs = (
        len(design.generations) * design.modules * len(design.places) * design.sessions * design.repetitions
    )
    if runs > MOST_RUNS:
        what = f"the plan asks for {runs} staircases, a rehearsal runs up to {MOST_RUNS}"
        table.fault("wrong-value", "modules", what, "plan fewer modules, sensors, sessions or repetitions")
