"""Trials: each sensor's share of a recording, with its own length, elongation and strain where known."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from campaign.notices import Notice
from campaign.recordings.identity import Identification, NamingRules, fate_of_sensor, refused_id
from campaign.recordings.recording import Channel, FloatArray, Recording, Trial, TrialIdentity
from campaign.recordings.register import RegisterRow, refusal_of_id, rest_length_mm, shown, tidy_id
from campaign.units import UnitError, parse_quantity

TrialKey = tuple[str, str, int]
"""File, sensor and repetition: what names a trial."""

REFERENCES = ("length", "elongation", "strain")
"""Quantities that a signal is calibrated against, in the order in which they are preferred."""

SET_POINT_TOLERANCE = 0.05
"""Share of a set-point in a name by which the data may miss it before the two are said to disagree."""

KEPT_LENGTH_KINDS = frozenset({"hold", "pressure", "thermal"})
"""Kinds in which a length is kept: its set-point is compared with the middle half of the data."""


@dataclass(frozen=True)
class Shares:
    """The trials of one recording.

    Attributes
    ----------
    trials
        Every trial that could be built, those that are set aside too.
    set_aside
        Of those that are not used, the codes of the reasons.
    notices
        Remarks on this recording.
    repetition_assumed
        Whether nobody numbers the repetition and it was taken as 1.
    """

    trials: tuple[Trial, ...]
    set_aside: dict[TrialKey, tuple[str, ...]]
    notices: tuple[Notice, ...]
    repetition_assumed: bool = False


def _refuse(refused: dict[TrialKey, tuple[str, ...]], key: TrialKey, *reasons: str) -> None:
    refused[key] = (*refused.get(key, ()), *reasons)


def key_of_trial(identity: TrialIdentity) -> TrialKey:
    """Return what names a trial."""
    return identity.file, identity.sensor, identity.repetition


def trials_of_recording(recording: Recording, identification: Identification, rules: NamingRules) -> Shares:
    """Build the trials of a recording that is identified.

    Parameters
    ----------
    recording
        As read, in canonical units.
    identification
        Whose it is; its module and kind are settled.
    rules
        From :func:`campaign.recordings.identity.naming_rules`.

    Returns
    -------
    Shares
        One trial a signal column: one in a narrow file, one a sensor in a wide file, one a repetition where
        they stand side by side, and one a run where the description splits recordings at restarts.
    """
    signals = [channel for channel in recording.channels if channel.quantity == "signal"]
    if not signals:
        return Shares((), {}, (_aside(recording.file, "no-signal", "no column is a signal"),))
    notices = _check_nodes(recording)
    trials: list[Trial] = []
    shared: dict[Hashable, tuple[object, object]] = {}
    refused: dict[TrialKey, tuple[str, ...]] = {}
    for signal in signals:
        identity, remarks = _identity(recording, signal, identification, rules)
        if identity is not None:
            made, more = _build(recording, signal, identity, rules, shared)
            remarks += more
            trials += made
            reasons = tuple(notice.code for notice in remarks if notice.weight == "set aside")
            for trial in made if reasons else ():
                _refuse(refused, key_of_trial(trial.identity), *reasons)
        notices += remarks
    notices += _check_alone(recording.file, trials, refused)
    notices += _check_set_points(identification, trials, refused)
    assumed = "repetition" not in identification.values and any(s.repetition is None for s in signals)
    return Shares(tuple(trials), refused, tuple(dict.fromkeys(notices)), assumed)


def _check_nodes(recording: Recording) -> list[Notice]:
    """Name nodes that headers call by what no id may be: their positions are not read."""
    nodes = {c.node: c.position for c in recording.channels if c.node is not None}
    reasons = {node: refusal_of_id(node) for node in nodes}
    return [
        Notice(
            "text-refused",
            "noted",
            recording.file,
            None,
            nodes[node],
            f"the node '{shown(node)}' {reason}",
            "its positions are not read",
            "give it another name",
        )
        for node, reason in reasons.items()
        if reason is not None
    ]


def _aside(file: str, code: str, what: str, remedy: str = "", column: int | None = None) -> Notice:
    return Notice(code, "set aside", file, None, column, what, "not used", remedy)


def _identity(
    recording: Recording, signal: Channel, identification: Identification, rules: NamingRules
) -> tuple[TrialIdentity | None, list[Notice]]:
    """Settle whose signal a column is; ``None`` where nobody says."""
    values, file = identification.values, recording.file
    sensor = tidy_id(signal.sensor) if signal.sensor is not None else values.get("sensor", "")
    notices = _check_column(file, signal, sensor, identification)
    if not sensor and values["kind"] != "blank":
        what = "nobody says which sensor this signal is of"
        remedy = "name it in trials.csv, the file's name, a header with {sensor} or [recordings.same]"
        return None, [*notices, _aside(file, "identity-missing", what, remedy, signal.position)]
    module = values["module"]
    row = rules.sensor_rows.get((module, sensor))
    notices += _check_sensor(file, module, sensor, row, rules)
    repetition = signal.repetition if signal.repetition is not None else int(values.get("repetition", "1"))
    identity = TrialIdentity(
        file=file,
        kind=values["kind"],
        generation=values.get("generation", ""),
        batch=values.get("batch", ""),
        module=module,
        sensor=sensor,
        position=values.get("position") or _position(row, sensor),
        repetition=repetition,
        session=values.get("session", ""),
        started=values.get("started", ""),
        channel=values.get("channel", ""),
        rest_length_mm=_known_length(row, "rest_length"),
        rest_length_uncertainty_mm=_known_length(row, "rest_length_uncertainty"),
    )
    return identity, notices


def _check_column(file: str, signal: Channel, sensor: str, identification: Identification) -> list[Notice]:
    """Compare what a column says of itself with what is said of the whole file."""
    notices = []
    of_file = {"sensor": sensor, "repetition": str(signal.repetition)}
    given = {"sensor": signal.sensor is not None, "repetition": signal.repetition is not None}
    for key, value in of_file.items():
        said = identification.values.get(key)
        source = identification.sources.get(key, "")
        if given[key] and said is not None and said != value and source != "[recordings.same]":
            what = (
                f"the {key} is '{shown(said)}' by {source} but '{shown(value)}' by column {signal.position}"
            )
            notices.append(
                _aside(file, "identity-conflict", what, "mend the one that is wrong", signal.position)
            )
    if given["sensor"] and (notice := refused_id(file, "sensor", sensor, f"column {signal.position}")):
        notices.append(replace(notice, column=signal.position))
    return notices


def _check_sensor(
    file: str, module: str, sensor: str, row: RegisterRow | None, rules: NamingRules
) -> list[Notice]:
    if (fate := fate_of_sensor(file, module, sensor, rules)) is not None:
        return [fate]
    if row is None and rules.registers.sensors.present and sensor:
        what = f"sensors.csv has no sensor '{shown(sensor)}' of module '{shown(module)}'"
        done = "used; its rest length is not known"
        return [Notice("sensor-not-listed", "noted", file, None, None, what, done, "add a row for it")]
    return []


def _position(row: RegisterRow | None, sensor: str) -> str:
    if row is None:
        return sensor
    between = f"{row.get('from')}–{row.get('to')}" if row.get("from") and row.get("to") else ""
    return row.get("position") or between or sensor


def _known_length(row: RegisterRow | None, column: str) -> float:
    try:
        return rest_length_mm(row, column)
    except UnitError:
        return float("nan")


def _build(
    recording: Recording,
    signal: Channel,
    identity: TrialIdentity,
    rules: NamingRules,
    shared: dict[Hashable, tuple[object, object]],
) -> tuple[list[Trial], list[Notice]]:
    """Build the trial of one signal column; several where it is split at restarts."""
    of_trial = _Columns(recording.channels, identity.sensor, signal.repetition)
    time = of_trial.values("time")
    recorded, reference, notices = _reference(recording.file, of_trial, identity, rules)
    resolution = rules.description.signal_reference
    trial = Trial(
        identity=identity,
        signal=signal.values,
        signal_unit=signal.unit,
        time_s=time,
        level=of_trial.values("level"),
        direction=of_trial.values("direction"),
        pressure_kpa=of_trial.values("pressure"),
        force_n=of_trial.values("force"),
        temperature_c=of_trial.values("temperature"),
        humidity_percent=of_trial.values("humidity"),
        cycle=of_trial.values("cycle"),
        placement=of_trial.values("placement"),
        nodes=of_trial.nodes(),
        line_numbers=recording.line_numbers,
        time_is_ordered=time is None or _is_ordered(time),
        shared=shared,
        signal_resolution=resolution.resolution if resolution.unit == signal.unit else float("nan"),
        reference=recorded or "length",
        **_derived(recorded, reference, identity.rest_length_mm),
    )
    runs = split_at_restarts(trial) if rules.description.split_where_time_restarts else [trial]
    if len(runs) > 1:
        what = f"time restarts {len(runs) - 1} times"
        done = f"split into {len(runs)} runs, as the description says"
        notices.append(
            Notice("split-at-restarts", "noted", recording.file, None, None, what, done, "", len(runs) - 1)
        )
    return runs, notices


def _is_ordered(time: FloatArray) -> bool:
    if np.all(time[1:] >= time[:-1]):
        return True
    finite = time[np.isfinite(time)]
    return bool(np.all(np.diff(finite) >= 0))


@dataclass(frozen=True)
class _Columns:
    """The columns of a recording that belong to one sensor and repetition."""

    channels: Sequence[Channel]
    sensor: str
    repetition: int | None

    def _of_this_repetition(self, channel: Channel) -> bool:
        return channel.repetition is None or channel.repetition == self.repetition

    def own(self, quantity: str) -> Channel | None:
        """A column that names this sensor."""
        return self._first(c for c in self.channels if c.quantity == quantity and c.sensor == self.sensor)

    def along(self, quantity: str) -> Channel | None:
        """A column that the description lays along this sensor."""
        return self._first(c for c in self.channels if c.quantity == quantity and self.sensor in c.along)

    def shared(self, quantity: str) -> Channel | None:
        """A column of the whole file."""
        plain = (c for c in self.channels if c.quantity == quantity and c.sensor is None and not c.along)
        return self._first(plain)

    def node(self, quantity: str, node: str) -> Channel | None:
        """A column of one node's position."""
        return self._first(c for c in self.channels if c.quantity == quantity and c.node == node)

    def nodes(self) -> dict[str, FloatArray]:
        """Positions (x, y) of all nodes that have columns for both, shape (rows, 2) by name."""
        names = dict.fromkeys(c.node for c in self.channels if c.quantity == "node_x" and c.node is not None)
        pairs = {name: (self.node("node_x", name), self.node("node_y", name)) for name in names}
        return {
            name: np.column_stack([x.values, y.values])
            for name, (x, y) in pairs.items()
            if x is not None and y is not None and refusal_of_id(name) is None
        }

    def values(self, quantity: str) -> FloatArray | None:
        """Values of the sensor's own column, else of the file's."""
        channel = self.own(quantity) or self.shared(quantity)
        return channel.values if channel is not None else None

    def _first(self, channels: Iterable[Channel]) -> Channel | None:
        return next((c for c in channels if self._of_this_repetition(c)), None)


def _reference(
    file: str, columns: _Columns, identity: TrialIdentity, rules: NamingRules
) -> tuple[str | None, FloatArray | None, list[Notice]]:
    """Find the column that the signal is calibrated against: which quantity, its values, and remarks."""
    found = list(_references(columns, rules.sensor_rows.get((identity.module, identity.sensor))))
    if found:
        quantity, channel_values, position = found[0]
        others = [f"column {place} ({name})" for name, _, place in found[1:] if place != position]
        if not others:
            return quantity, channel_values, []
        what = f"beside column {position} ({quantity}) there is {' and '.join(others)}"
        done = f"{quantity} is taken as the reference, the other is left"
        remedy = 'give the other quantity = "ignore"'
        return (
            quantity,
            channel_values,
            [Notice("two-references", "noted", file, None, None, what, done, remedy)],
        )
    if identity.kind in ("hold", "blank"):
        return None, None, []
    what = f"strain not known in this trial: no length belongs to sensor '{shown(identity.sensor)}'"
    remedy = 'give the column along = ["…"], or the sensor a column of its own'
    if identity.kind == "staircase":
        return None, None, [_aside(file, "strain-not-known", what, remedy)]
    return (
        None,
        None,
        [Notice("strain-not-known", "noted", file, None, None, what, "not calibrated by it", remedy)],
    )


def _references(columns: _Columns, row: RegisterRow | None) -> Iterator[tuple[str, FloatArray, int]]:
    """Yield what a sensor's length can be taken from, most its own first, as (quantity, values, column)."""
    wide = _is_wide(columns.channels)
    for find in (columns.own, columns.along):
        for quantity in REFERENCES:
            if (channel := find(quantity)) is not None:
                yield quantity, channel.values, channel.position
    if row is not None and (lengths := _between_nodes(columns, row)) is not None:
        yield "length", lengths, 0
    for quantity in REFERENCES:
        channel = columns.shared(quantity)
        if channel is not None and (quantity == "strain" or not wide):
            yield quantity, channel.values, channel.position


def _is_wide(channels: Sequence[Channel]) -> bool:
    """Whether a file carries several sensors: then a stage's length is not every sensor's length."""
    return len({channel.sensor for channel in channels if channel.quantity == "signal"}) > 1


def _between_nodes(columns: _Columns, row: RegisterRow) -> FloatArray | None:
    """Return the distance between the two nodes of a sensor from their recorded positions, in mm."""
    squares = None
    for axis in ("node_x", "node_y", "node_z"):
        first, second = columns.node(axis, row.get("from")), columns.node(axis, row.get("to"))
        if first is None or second is None:
            if axis == "node_z":
                break
            return None
        squares = (squares if squares is not None else 0.0) + (first.values - second.values) ** 2
    return np.sqrt(squares) if squares is not None else None


def _derived(recorded: str | None, values: FloatArray | None, rest_mm: float) -> dict[str, FloatArray | None]:
    """Return length, elongation and strain: one as recorded, the others by the rest length."""
    if recorded is None or values is None:
        return {"length_mm": None, "elongation_mm": None, "strain": None}
    known = np.isfinite(rest_mm)
    if recorded == "length":
        elongation = values - rest_mm if known else None
        return {
            "length_mm": values,
            "elongation_mm": elongation,
            "strain": elongation / rest_mm if elongation is not None else None,
        }
    if recorded == "elongation":
        return {
            "length_mm": rest_mm + values if known else None,
            "elongation_mm": values,
            "strain": values / rest_mm if known else None,
        }
    return {
        "length_mm": rest_mm * (1 + values) if known else None,
        "elongation_mm": rest_mm * values if known else None,
        "strain": values,
    }


def split_at_restarts(trial: Trial) -> list[Trial]:
    """Split a trial where its time falls back by more than half of what had passed.

    Returns
    -------
    list of Trial
        The trial itself where time never restarts; else its runs, their repetitions counted on from its own.
    """
    time = trial.time_s
    if time is None:
        return [trial]
    starts = [0]
    for row in np.flatnonzero(np.diff(time) < 0) + 1:
        begun = time[starts[-1]]
        if time[row] - begun < (time[row - 1] - begun) / 2:
            starts.append(int(row))
    ends = [*starts[1:], len(time)]
    return [_rows(trial, slice(a, b), number) for number, (a, b) in enumerate(zip(starts, ends, strict=True))]


_SERIES = (
    "signal",
    "time_s",
    "length_mm",
    "elongation_mm",
    "strain",
    "level",
    "direction",
    "pressure_kpa",
    "force_n",
    "temperature_c",
    "humidity_percent",
    "cycle",
    "placement",
    "line_numbers",
)


def _rows(trial: Trial, rows: slice, number: int) -> Trial:
    cut = {name: values[rows] for name in _SERIES if (values := getattr(trial, name)) is not None}
    identity = replace(trial.identity, repetition=trial.identity.repetition + number)
    nodes = {name: places[rows] for name, places in trial.nodes.items()}
    part = replace(trial, identity=identity, nodes=nodes, **cut)
    return replace(part, time_is_ordered=part.time_s is None or _is_ordered(part.time_s))


def _check_alone(
    file: str, trials: Sequence[Trial], refused: dict[TrialKey, tuple[str, ...]]
) -> list[Notice]:
    """Set aside signals of one file that claim to be the same sensor and repetition."""
    notices = []
    for key in dict.fromkeys(key_of_trial(trial.identity) for trial in trials):
        count = sum(key_of_trial(trial.identity) == key for trial in trials)
        if count > 1:
            _refuse(refused, key, "signals-alike")
            what = f"{count} columns claim to be sensor '{shown(key[1])}', repetition {key[2]}"
            notices.append(_aside(file, "signals-alike", what, "state sensor or repetition in [[columns]]"))
    return notices


def _check_set_points(
    identification: Identification, trials: Sequence[Trial], refused: dict[TrialKey, tuple[str, ...]]
) -> list[Notice]:
    """Set aside trials whose data contradict a length or pressure that the file's name states."""
    notices = []
    for key, text in identification.set_points.items():
        if key not in ("length", "pressure"):
            continue
        try:
            value = _set_point(text, key)
        except UnitError as fault:
            what = f"the name's {key} '{shown(text)}': {fault}"
            notices.append(
                Notice("set-point-unreadable", "noted", identification.file, None, None, what, "not compared")
            )
            continue
        for trial in trials:
            seen = _contradicting_range(trial, key, value)
            if seen is not None:
                _refuse(refused, key_of_trial(trial.identity), "set-point-contradicted")
                notices.append(_contradiction(identification.file, key, text, seen))
    return notices


def _set_point(text: str, key: str) -> float:
    """Return a set-point in mm or kPa, NaN for a bare number: with no unit it cannot disagree."""
    if not any(c.isalpha() for c in text):
        return float("nan")
    return parse_quantity(text.replace(",", "."), (key,)).value


def _contradicting_range(trial: Trial, key: str, value: float) -> tuple[float, float] | None:
    """Return the range of the data where a set-point lies outside of it, else ``None``."""
    series = [trial.pressure_kpa] if key == "pressure" else [trial.length_mm, trial.elongation_mm]
    kept = key == "length" and trial.identity.kind in KEPT_LENGTH_KINDS
    ranges = [found for s in series if s is not None and (found := _range(s, middle_half=kept)) is not None]
    if not ranges or not np.isfinite(value):
        return None
    margin = SET_POINT_TOLERANCE * abs(value)
    outside = [value < low - margin or value > high + margin for low, high in ranges]
    return ranges[0] if all(outside) else None


def _range(values: FloatArray, *, middle_half: bool) -> tuple[float, float] | None:
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return None
    low, high = np.quantile(finite, [0.25, 0.75] if middle_half else [0.0, 1.0])
    return float(low), float(high)


def _contradiction(file: str, key: str, text: str, seen: tuple[float, float]) -> Notice:
    unit = "kPa" if key == "pressure" else "mm"
    what = f"the name says {key} {shown(text)}, the data lie between {seen[0]:.6g} and {seen[1]:.6g} {unit}"
    return _aside(
        file, "set-point-contradicted", what, "mend the name, or give that part {ignore} in the pattern"
    )
