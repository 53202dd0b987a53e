"""What the results hold of one module: its own pages and its sensors' look for their rows in these alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any, Protocol, TypeVar

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.results import CampaignResults


class _OfModule(Protocol):
    @property
    def module(self) -> str: ...


_Own = TypeVar("_Own", bound=_OfModule)


class ModuleShares:
    """The results of a campaign, module by module.

    Every large table is parted once; looking for the rows of each sensor in whole tables costs the product of
    sensors and rows.

    Parameters
    ----------
    results
        What one run of the report found out.
    """

    def __init__(self, results: CampaignResults) -> None:
        self._results = results
        self._places: dict[int, dict[str, npt.NDArray[np.intp]]] = {}
        self._things: dict[int, dict[str, list[Any]]] = {}
        self._last: tuple[str, CampaignResults] | None = None

    def of(self, module: str) -> CampaignResults:
        """Return the results with the rows of *module* alone in the large tables.

        Registers, lines, limits and what describes the whole campaign stay whole.
        """
        if self._last is None or self._last[0] != module:
            self._last = module, self._made(module)
        return self._last[1]

    def _made(self, module: str) -> CampaignResults:
        whole = self._results
        intake = replace(whole.intake, trials=self._rows(whole.intake.trials, module))
        readings = replace(whole.readings, table=self._rows(whole.readings.table, module))
        changed: dict[str, Any] = {"intake": intake, "readings": readings}
        if whole.variance is not None:
            effects = self._rows(whole.variance.effects, module)
            changed["variance"] = replace(whole.variance, effects=effects)
        if (loops := whole.hysteresis) is not None:
            changed["hysteresis"] = replace(
                loops,
                loops=self._rows(loops.loops, module),
                sensors=self._rows(loops.sensors, module),
                outlines=self._own(loops.outlines, module),
                rates=replace(loops.rates, sensors=self._rows(loops.rates.sensors, module)),
            )
        if (drift := whole.drift) is not None:
            holds, curves = self._rows(drift.holds, module), self._own(drift.curves, module)
            changed["drift"] = replace(drift, holds=holds, curves=curves)
        if (pressure := whole.pressure) is not None:
            changed["pressure"] = replace(
                pressure,
                table=self._rows(pressure.table, module),
                sweeps=self._rows(pressure.sweeps, module),
                points=self._rows(pressure.points, module),
            )
        if (influences := whole.influences) is not None:
            changed["influences"] = replace(influences, table=self._rows(influences.table, module))
        if (lasted := whole.endurance) is not None:
            changed["endurance"] = replace(lasted, sensors=self._rows(lasted.sensors, module))
        if (budget := whole.budget) is not None:
            worst = tuple(found for found in budget.worst if found.subject.module == module)
            changed["budget"] = replace(budget, worst=worst)
        return replace(whole, **changed)

    def _rows(self, table: pd.DataFrame, module: str) -> pd.DataFrame:
        if "module" not in table:
            return table
        places = self._places.get(id(table))
        if places is None:
            found = table.groupby(table["module"].astype(str)).indices
            places = {str(name): np.asarray(rows, np.intp) for name, rows in found.items()}
            self._places[id(table)] = places
        return table.iloc[places.get(module, np.empty(0, np.intp))]

    def _own(self, things: Sequence[_Own], module: str) -> tuple[_Own, ...]:
        parted = self._things.get(id(things))
        if parted is None:
            parted = self._things[id(things)] = {}
            for thing in things:
                parted.setdefault(thing.module, []).append(thing)
        return tuple(parted.get(module, ()))
