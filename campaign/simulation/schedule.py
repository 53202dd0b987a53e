"""When runs of a synthetic campaign are made: modules of all generations take turns, so dates favour none."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from itertools import chain, zip_longest

from campaign.simulation.effects import design_of
from campaign.simulation.plan import Plan


@dataclass(frozen=True)
class Schedule:
    """The stand's diary.

    Attributes
    ----------
    first_day
        Day of the first mounting; each mounting has a day of its own.
    first_hour
        Time of the first run of a day.
    run_minutes
        From the start of a run to the start of the next.
    """

    first_day: date
    first_hour: time = time(8, 30)
    run_minutes: int = 9

    def mounting_day(self, plan: Plan, module: str, session: str) -> date:
        """Return the day on which *module* is mounted for *session*: all modules once, then all again."""
        order = testing_order(plan)
        rounds = plan.sessions.index(session)
        return self.first_day + timedelta(days=rounds * len(order) + order.index(module))

    def run_start(self, plan: Plan, run: int) -> datetime:
        """Return when *run* (index of the design's runs) starts: every sensor once, then every one again."""
        design = design_of(plan)
        sensor = int(design.run_sensor[run])
        module = plan.modules[int(design.sensor_module[sensor])]
        session = plan.sessions[int(design.run_session_name[run])]
        turn = int(design.run_repetition[run]) - 1
        if not plan.shared_runs:
            turn = turn * len(plan.places) + int(design.sensor_place[sensor])
        start = datetime.combine(self.mounting_day(plan, module, session), self.first_hour)
        return start + timedelta(minutes=turn * self.run_minutes)

    def last_day(self, plan: Plan) -> date:
        """Return the day of the last mounting."""
        return self.first_day + timedelta(days=len(plan.sessions) * len(plan.modules) - 1)


def testing_order(plan: Plan) -> tuple[str, ...]:
    """Return the modules in the order of testing: one of each generation in turn."""
    turns = zip_longest(*(generation.modules for generation in plan.generations))
    return tuple(module for module in chain.from_iterable(turns) if module is not None)
