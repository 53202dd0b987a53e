"""Where modules and sensors stand on the axes of figures: in one order all over the site."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import pandas as pd

from campaign.pages import palette, slugs
from campaign.pages.figures import Layout, Trace, axis, intervals

_MODULE = ["generation", "module"]
_SENSOR = ["generation", "module", "sensor"]


@dataclass(frozen=True)
class SensorAxis:
    """Modules as rows, their sensors fanned out within the row.

    Attributes
    ----------
    generations
        In order of name: the order of colours.
    modules
        (generation, module), in order; row *i* stands at height *i*.
    places
        Height of each (generation, module, sensor).
    """

    generations: tuple[str, ...]
    modules: tuple[tuple[str, str], ...]
    places: dict[tuple[str, str, str], float]

    @property
    def height(self) -> int:
        """Height in px that keeps neighbouring sensors apart."""
        return max(240, 90 + 13 * len(self.places) + 8 * len(self.modules))

    def heights(self, rows: pd.DataFrame) -> list[float]:
        """Return the height of each row's sensor."""
        return [self.places[key] for key in _keys(rows)]

    def axis(self) -> Layout:
        """Return the y axis: one tick a module, the first on top; of one module, one tick a sensor."""
        if len(self.modules) == 1:
            own = [(height, sensor) for (_, _, sensor), height in self.places.items()]
            return axis(_title("Sensor", own), ticks=own, low=-0.6, high=0.6, reverse=True)
        ticks = [(float(i), module) for i, (_, module) in enumerate(self.modules)]
        return axis(
            _title("Module", ticks), ticks=ticks, low=-0.6, high=len(self.modules) - 0.4, reverse=True
        )

    def style(self, generation: str) -> palette.GenerationStyle:
        """Return the marks of *generation*."""
        return palette.generation_style(generation, self.generations)

    def in_colours_of(self, generations: tuple[str, ...]) -> SensorAxis:
        """Return the axis with the colours of all *generations*, where they hold those of the axis."""
        known = set(self.generations) <= set(generations)
        return replace(self, generations=generations) if known else self


def sensor_axis(rows: pd.DataFrame) -> SensorAxis:
    """Return the axis for the sensors in *rows* (columns generation, module, sensor), sorted."""
    sensors = sorted(set(_keys(rows)))
    modules = tuple(sorted({(g, m) for g, m, _ in sensors}))
    places: dict[tuple[str, str, str], float] = {}
    for height, module in enumerate(modules):
        own = [key for key in sensors if key[:2] == module]
        step = 0.72 / max(len(own) - 1, 1)
        for index, key in enumerate(own):
            places[key] = height + (index - (len(own) - 1) / 2) * step
    return SensorAxis(tuple(sorted({g for g, _ in modules})), modules, places)


def _keys(rows: pd.DataFrame) -> list[tuple[str, str, str]]:
    columns = ([str(value) for value in rows[name].tolist()] for name in _SENSOR)
    return [(generation, module, sensor) for generation, module, sensor in zip(*columns, strict=True)]


def _title(words: str, ticks: Sequence[tuple[float, str]]) -> str:
    """Return the axis title; none where long names would run into it."""
    return words if max((len(name) for _, name in ticks), default=0) <= 5 else ""


def sensor_links(rows: pd.DataFrame) -> list[str]:
    """Return the address of each row's sensor page."""
    names = zip(rows["module"].tolist(), rows["sensor"].tolist(), strict=True)
    return [slugs.sensor_href(str(module), str(sensor)) for module, sensor in names]


def interval_traces(
    rows: pd.DataFrame, where: SensorAxis, sentences: Sequence[str], *, factor: float = 1.0, axes: str = ""
) -> list[Trace]:
    """Return one trace a sensor's module: estimates with intervals at the sensors' heights, each a link.

    *rows* has columns generation, module, sensor, estimate, low, high; *sentences* one hover text a row;
    values are multiplied by *factor*.
    """
    rows = rows.assign(_text=list(sentences))
    return [
        intervals(
            part["estimate"] * factor,
            part["low"] * factor,
            part["high"] * factor,
            where.heights(part),
            style=where.style(str(generation)),
            name=str(module),
            text=part["_text"].tolist(),
            links=sensor_links(part),
            module=str(module),
            axes=axes,
        )
        for (generation, module), part in rows.groupby(_MODULE, sort=True)
    ]
