"""What page 0 says of loops and of thousands of cycles, as facts."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import pandas as pd

from campaign.analyses.endurance import Endurance
from campaign.analyses.findings import Finding, SensorFigure, limit_value, sum_up, verdict_of_limit
from campaign.analyses.hysteresis import Hysteresis
from campaign.analyses.limits import Limits
from campaign.analyses.loop_table import BY_LINE


@dataclass(frozen=True)
class SettledLoops:
    """Settled loops of one generation.

    ``figure`` sums up the widths; ``told`` is the number of sensors whose loops are told from none;
    ``settled`` of them settle, usually from cycle ``usual`` on (NaN: none does); ``softening`` is the median
    excess of the first loop's range of signal in per cent. ``by_line`` says whether widths are in %FSO of a
    staircase line, or of the loops' own range. ``rate`` is in units of the reference a second. ``delay`` with
    its limits is in s, NaN where one rate was run.
    """

    figure: SensorFigure
    told: int
    settled: int
    usual: float
    softening: float
    by_line: bool
    rate: float
    delay: float
    delay_low: float
    delay_high: float


@dataclass(frozen=True)
class Lasting:
    """Endurance of one generation: tested, failed, and the share that works beyond the last step."""

    generation: str
    tested: int
    failed: int
    cycle: float
    survival: float
    low: float
    high: float


def loop_findings(
    hysteresis: Hysteresis | None,
    endurance: Endurance | None,
    limits: Limits,
    put_back: Hysteresis | None = None,
) -> tuple[Finding, ...]:
    """Return what page 0 says of loops and endurance; nothing where neither was measured.

    *put_back* holds the loops with everything that was set aside put back, ``None`` where no loops were.
    """
    found: list[Finding] = []
    if hysteresis is not None:
        facts = _settled_loops(hysteresis, limit_value(limits, "hysteresis"), put_back)
        found.append(Finding("loops", facts, verdict_of_limit(limits, "hysteresis"), "hysteresis"))
    if endurance is not None:
        found.append(Finding("endurance", lasting(endurance)))
    return tuple(found)


def _settled_loops(
    hysteresis: Hysteresis, limit: float, put_back: Hysteresis | None
) -> tuple[SettledLoops, ...]:
    sensors = _with_widths(hysteresis)
    delays = {str(row["generation"]): row for row in hysteresis.rates.delays.to_dict("records")}
    facts = []
    for summed in sum_up(sensors, limit, None if put_back is None else _with_widths(put_back)):
        own = sensors[sensors["generation"] == summed.generation]
        figure = _of_an_only_sensor(summed, own) if summed.sensors == 1 else summed
        settled = own["settled_from_cycle"].dropna()
        late = delays.get(figure.generation, {"delay_s": math.nan, "low": math.nan, "high": math.nan})
        facts.append(
            SettledLoops(
                figure=figure,
                told=int((own["low"] > 0).sum()),
                settled=len(settled),
                usual=float(settled.median()) if len(settled) else math.nan,
                softening=float(own["softening_percent"].median()),
                by_line=bool(own["scale"].eq(BY_LINE).all()),
                rate=hysteresis.rate_per_s,
                delay=float(late["delay_s"]),
                delay_low=float(late["low"]),
                delay_high=float(late["high"]),
            )
        )
    return tuple(facts)


def _with_widths(hysteresis: Hysteresis) -> pd.DataFrame:
    return hysteresis.sensors.assign(value=hysteresis.sensors["width_percent_fso"])


def _of_an_only_sensor(figure: SensorFigure, own: pd.DataFrame) -> SensorFigure:
    """Give the figure of an only sensor the interval of that sensor."""
    known = own.dropna(subset=["value"]).iloc[0]
    return replace(figure, low=float(known["low"]), high=float(known["high"]))


def lasting(endurance: Endurance) -> tuple[Lasting, ...]:
    """Return how many sensors of each generation failed, and what share works beyond the last step."""
    made = []
    for generation, rows in endurance.survival.groupby("generation", sort=True):
        last = rows.iloc[-1]
        made.append(
            Lasting(
                generation=str(generation),
                tested=int(rows["at_risk"].max()),
                failed=int(rows["failed"].sum()),
                cycle=float(last["cycle"]),
                survival=float(last["survival"]),
                low=float(last["low"]),
                high=float(last["high"]),
            )
        )
    return tuple(made)
