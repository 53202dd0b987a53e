"""What is true in a synthetic campaign: the law of the signal and the size of everything that spreads it."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from campaign.simulation.trial_truths import CyclicTruth, HoldTruth, InfluenceTruth, LayoutTruth

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class SignalLaw:
    """Mean signal of a generation, C(ε) = C_p + c·L₀·(1 + ε)^p.

    Attributes
    ----------
    parasitic
        C_p, capacitance of cable and connector, in signal units (pF).
    per_mm
        c, signal of a millimetre of sensor at rest, in signal units a mm.
    exponent
        p, stretch exponent; 1 is a straight line, the law of a free uniaxial strip of incompressible
        dielectric between parallel plates.
    """

    parasitic: float = 8.0
    per_mm: float = 0.80
    exponent: float = 1.0

    def signal(self, strain: FloatArray, rest_length_mm: FloatArray) -> FloatArray:
        """Return the mean signal at *strain* (mm/mm) of sensors of *rest_length_mm*, arrays of one shape."""
        return self.parasitic + self.per_mm * rest_length_mm * (1.0 + strain) ** self.exponent

    def line(self, rest_length_mm: float) -> tuple[float, float]:
        """Return intercept and slope at zero strain, in signal units and signal units per mm/mm."""
        own = self.per_mm * rest_length_mm
        return self.parasitic + own, own * self.exponent

    def gauge_factor(self, rest_length_mm: float) -> float:
        """Return (dC/dε)/C at zero strain: the parasitic capacitance lowers it."""
        intercept, slope = self.line(rest_length_mm)
        return slope / intercept


@dataclass(frozen=True)
class LineSpread:
    """A random line: SDs of its intercept and slope, and their correlation.

    Attributes
    ----------
    intercept
        SD at zero strain, in signal units.
    slope
        SD of the slope, in signal units per mm/mm.
    correlation
        Between the two, −1 to 1.
    """

    intercept: float = 0.0
    slope: float = 0.0
    correlation: float = 0.0

    def __post_init__(self) -> None:
        if self.intercept < 0 or self.slope < 0 or abs(self.correlation) > 1:
            raise ValueError("an SD is negative or a correlation lies outside −1 to 1")

    @property
    def covariance(self) -> FloatArray:
        """Covariance of (intercept, slope), shape (2, 2)."""
        shared = self.correlation * self.intercept * self.slope
        return np.array([[self.intercept**2, shared], [shared, self.slope**2]])

    @property
    def factor(self) -> FloatArray:
        """Lower triangular square root of the covariance, shape (2, 2); zero SDs are ordinary values."""
        rest = np.sqrt(1.0 - self.correlation**2)
        return np.array([[self.intercept, 0.0], [self.correlation * self.slope, rest * self.slope]])

    def sd_at(self, strain: float) -> float:
        """Return the SD of the line's value at *strain* (mm/mm), in signal units."""
        place = np.array([1.0, strain])
        return float(np.sqrt(place @ self.covariance @ place))


@dataclass(frozen=True)
class Components:
    """The spread of a generation, level by level, in signal units.

    Attributes
    ----------
    batch, module, sensor
        What is built: shared by the modules of a batch, the sensors of a module, the runs of a sensor.
    mounting
        Shared by all sensors of a module in one mounting.
    session
        Of one sensor in one mounting.
    shared_run
        Shared by all sensors of one run; only where runs are shared.
    repetition
        Of one sensor in one run.
    sensor_by_level
        SD of what a sensor repeats at a level in every run ('sensor nonlinearity').
    residual
        SD of a reading about all of these.
    residual_growth
        Residual SD at full scale over that at zero strain, minus one; 0: the same everywhere.
    residual_correlation
        Lag-1 autocorrelation of the residuals of successive readings of a run.
    """

    batch: LineSpread = field(default_factory=LineSpread)
    module: LineSpread = field(default_factory=LineSpread)
    sensor: LineSpread = field(default_factory=LineSpread)
    mounting: LineSpread = field(default_factory=LineSpread)
    session: LineSpread = field(default_factory=LineSpread)
    shared_run: LineSpread = field(default_factory=LineSpread)
    repetition: LineSpread = field(default_factory=LineSpread)
    sensor_by_level: float = 0.0
    residual: float = 0.1
    residual_growth: float = 0.0
    residual_correlation: float = 0.0


@dataclass(frozen=True)
class LoopWidth:
    """Signed width of the staircase loop, falling minus rising at mid strain, in signal units.

    The width is zero at both ends of the range and greatest at its middle; ``mean`` is a generation's, ``sd``
    the spread between its sensors.
    """

    mean: float = 0.0
    sd: float = 0.0


@dataclass(frozen=True)
class SampleNoise:
    """Noise of single samples of a log: white noise and a slow first-order part.

    Attributes
    ----------
    white, slow
        SDs in signal units.
    slow_correlation
        Correlation of the slow part from one sample to the next.
    """

    white: float = 0.0
    slow: float = 0.0
    slow_correlation: float = 0.8

    def standard_error(self, count: int) -> float:
        """Return the SD of the mean of *count* successive samples (exact, first-order noise plus white)."""
        lags = np.arange(1, count)
        inflation = 1.0 + 2.0 * float(np.sum((1.0 - lags / count) * self.slow_correlation**lags))
        return float(np.sqrt((self.white**2 + self.slow**2 * inflation) / count))


@dataclass(frozen=True)
class Settling:
    """What follows a step: a share of its signal is still missing and comes with a time constant (s)."""

    share: float = 0.0
    time_s: float = 1.0


@dataclass(frozen=True)
class GenerationTruth:
    """All that is true of one generation.

    Attributes
    ----------
    law, components, loop, noise, settling
        Lines, their spread, the loop of the staircases, noise of samples, and what follows a step.
    cyclic, hold, pressure, thermal, layout
        What the other kinds of trial add.
    """

    law: SignalLaw = field(default_factory=SignalLaw)
    components: Components = field(default_factory=Components)
    loop: LoopWidth = field(default_factory=LoopWidth)
    noise: SampleNoise = field(default_factory=SampleNoise)
    settling: Settling = field(default_factory=Settling)
    cyclic: CyclicTruth = field(default_factory=CyclicTruth)
    hold: HoldTruth = field(default_factory=HoldTruth)
    pressure: InfluenceTruth = field(default_factory=InfluenceTruth)
    thermal: InfluenceTruth = field(default_factory=InfluenceTruth)
    layout: LayoutTruth = field(default_factory=LayoutTruth)


@dataclass(frozen=True)
class StandTruth:
    """Errors of what counts as known, and the surroundings.

    Attributes
    ----------
    scale
        SD of the relative error of the length scale, drawn once a campaign.
    zero_mm
        SD of the error of the length's zero, drawn once a mounting.
    rest_length_mm
        SD of the error of a measured rest length, drawn once a sensor.
    build_mm
        SD of the built rest length about the nominal one, drawn once a sensor; known, it changes no strain.
    length_noise_mm
        SD of a logged length about the one set.
    node_mm
        SD of a node's place about the one stated of its support point, along x and y, drawn once a placement.
    temperature_c, temperature_sd_c
        Mean temperature, and the SD of a mounting's about it, in °C.
    signal_per_kelvin
        Signal change a kelvin away from ``temperature_c``.
    """

    scale: float = 0.0
    zero_mm: float = 0.0
    rest_length_mm: float = 0.0
    build_mm: float = 0.0
    length_noise_mm: float = 0.0
    node_mm: float = 0.0
    temperature_c: float = 22.0
    temperature_sd_c: float = 0.0
    signal_per_kelvin: float = 0.0


@dataclass(frozen=True)
class Truth:
    """What is true of a campaign: one generation's truth for all, or one for each of the plan in turn."""

    generations: tuple[GenerationTruth, ...] = (GenerationTruth(),)
    stand: StandTruth = field(default_factory=StandTruth)
    unit: str = "pF"

    def of(self, index: int) -> GenerationTruth:
        """Return the truth of the plan's generation *index*; the last one given serves all that follow."""
        return self.generations[min(index, len(self.generations) - 1)]
