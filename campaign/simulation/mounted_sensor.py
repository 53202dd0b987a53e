"""One sensor on the stand: its own line in one mounting, as the staircases know it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from campaign.simulation.effects import Effects, design_of
from campaign.simulation.plan import Place, Plan
from campaign.simulation.truth import GenerationTruth, LineSpread, Truth

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class MountedSensor:
    """What is true of a sensor in one mounting.

    Attributes
    ----------
    module, place, number, module_number
        Which sensor, and its and its module's number in the design.
    truth
        What is true of its generation.
    line
        (2,): sum of all random lines that apply, signal units and signal units per mm/mm.
    levels, by_level
        Strains of the staircase, and what the sensor repeats there, signal units.
    loop_width
        Falling minus rising at mid strain, signal units.
    rest_length_mm, true_rest_length_mm
        As measured, and as it is.
    scale_error, zero_error_mm
        Errors of the indicated length.
    temperature_c, warmth
        Mean temperature of the mounting, and the signal that it adds.
    """

    module: str
    place: Place
    number: int
    module_number: int
    truth: GenerationTruth
    line: FloatArray
    levels: FloatArray
    by_level: FloatArray
    loop_width: float
    rest_length_mm: float
    true_rest_length_mm: float
    scale_error: float
    zero_error_mm: float
    temperature_c: float
    warmth: float

    def signal(self, strain: FloatArray) -> FloatArray:
        """Return the mean signal at the indicated *strain* (mm/mm), of any shape: no loop, no noise.

        Between the levels of the staircase the sensor's own bend is interpolated.
        """
        length = self.rest_length_mm * (1.0 + strain) * (1.0 + self.scale_error) + self.zero_error_mm
        return self._signal(length / self.true_rest_length_mm - 1.0, strain)

    def signal_at_length(self, length_mm: FloatArray) -> FloatArray:
        """Return the mean signal at a true length in mm, of any shape: no stage is between."""
        return self._signal(length_mm / self.true_rest_length_mm - 1.0, self.indicated_strain(length_mm))

    def indicated_strain(self, length_mm: FloatArray) -> FloatArray:
        """Return the strain (mm/mm) of lengths in mm by the rest length as measured."""
        return np.asarray(length_mm / self.rest_length_mm - 1.0)

    def _signal(self, true: FloatArray, strain: FloatArray) -> FloatArray:
        law = self.truth.law.signal(true, np.full_like(true, self.place.rest_length_mm))
        bend = np.interp(strain, self.levels, self.by_level)
        return np.asarray(law + self.line[0] + self.line[1] * true + bend + self.warmth)

    def shifted(self, line: FloatArray) -> MountedSensor:
        """Return the sensor with another random line added, as of one run."""
        return replace(self, line=self.line + line)


def mounted_sensor(
    plan: Plan, truth: Truth, effects: Effects, module: str, position: str, session: str
) -> MountedSensor:
    """Return a sensor in a mounting of the plan: the same line as in its staircases of that mounting."""
    sensor = unmounted_sensor(plan, truth, effects, module, position)
    sessions = len(plan.sessions)
    mounting = sensor.module_number * sessions + plan.sessions.index(session)
    own = sensor.number * sessions + plan.sessions.index(session)
    temperature = float(effects.temperature_c[mounting])
    return replace(
        sensor,
        line=sensor.line + effects.mounting[mounting] + effects.session[own],
        zero_error_mm=float(effects.zero_error_mm[mounting]),
        temperature_c=temperature,
        warmth=truth.stand.signal_per_kelvin * (temperature - truth.stand.temperature_c),
    )


def unmounted_sensor(plan: Plan, truth: Truth, effects: Effects, module: str, position: str) -> MountedSensor:
    """Return a sensor as built: what belongs to a mounting is still to be added."""
    design = design_of(plan)
    places = [place.position for place in plan.places]
    module_number, place = plan.modules.index(module), places.index(position)
    number = module_number * len(places) + place
    generation = int(design.sensor_generation[number])
    built = effects.batch[design.module_batch[module_number]] + effects.module[module_number]
    rest = float(effects.rest_length_mm[number])
    return MountedSensor(
        module=module,
        place=plan.places[place],
        number=number,
        module_number=module_number,
        truth=truth.of(generation),
        line=built + effects.sensor[number],
        levels=np.array(plan.staircase.levels),
        by_level=effects.sensor_by_level[number],
        loop_width=float(effects.loop_width[number]),
        rest_length_mm=rest,
        true_rest_length_mm=rest - float(effects.rest_length_error_mm[number]),
        scale_error=effects.scale_error,
        zero_error_mm=0.0,
        temperature_c=truth.stand.temperature_c,
        warmth=0.0,
    )


def drawn_line(spread: LineSpread, generator: np.random.Generator) -> FloatArray:
    """Draw one random line (intercept, slope), shape (2,)."""
    return np.asarray(spread.factor @ generator.standard_normal(2))


def remarks(module: str, sensor: str, started: str) -> tuple[tuple[str, str], ...]:
    """Return the first lines of a recording; an empty *sensor* is not named (a file of several)."""
    named = (("sensor", sensor),) if sensor else ()
    said = ("Invented data made by campaign.simulation; nothing was measured", "")
    return (said, ("module", module), *named, ("started", started))
