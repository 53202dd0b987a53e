"""Pressure that a trial of another kind logs beside its own course: kept as cross-products, not as series.

What a correction for pressure does to such a trial is known only after the pressure trials are analysed, when
no recording is in memory any more. The cross-products of 1, x, p, x p and y suffice for the spread of signals
about the trial's own line, with any correction of the form (c + d x) p.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from campaign.recordings.recording import Trial

FloatArray = npt.NDArray[np.float64]

FEWEST = 12
"""Complete samples below which nothing is kept."""

SMALLEST_KPA = 0.05
"""A pressure that varies by less stands still."""


@dataclass(frozen=True)
class LoggedPressure:
    """What is kept of a trial that logs pressure.

    Attributes
    ----------
    products
        ``strain``, ``elongation`` or ``length`` → (5, 5) cross-products of 1, x, p, x p and the signal less
        its mean, over the complete samples; only the references that the trial has.
    x_range
        The same names → lowest and highest x.
    low_kpa, high_kpa
        Range of the pressure.
    samples
        Complete samples.
    """

    products: dict[str, FloatArray] = field(default_factory=dict)
    x_range: dict[str, tuple[float, float]] = field(default_factory=dict)
    low_kpa: float = float("nan")
    high_kpa: float = float("nan")
    samples: int = 0

    def spread(self, reference: str, at_origin: float, per_x: float, origin: float) -> float:
        """Return the SD of signals about their line over x once (c + d (x − origin)) p is taken off.

        Parameters
        ----------
        reference
            Name of the reference that x is.
        at_origin, per_x
            c and d; zeros for no correction.
        origin
            Where c holds.
        """
        products = self.products[reference]
        weights = np.array([0.0, 0.0, -(at_origin - per_x * origin), -per_x, 1.0])
        line, cross = products[:2, :2], products[:2] @ weights
        rest = float(weights @ products @ weights - cross @ np.linalg.pinv(line) @ cross)
        return float(np.sqrt(max(rest, 0.0) / max(self.samples - 2, 1)))


def logged_pressure(trial: Trial) -> LoggedPressure | None:
    """Return what a trial that logs pressure keeps of it; ``None`` where it logs none or it stands still."""
    references = {"strain": trial.strain, "elongation": trial.elongation_mm, "length": trial.length_mm}
    known = {name: values for name, values in references.items() if values is not None}
    if trial.pressure_kpa is None or not known:
        return None
    complete = np.isfinite(trial.signal) & np.isfinite(trial.pressure_kpa)
    complete &= np.isfinite(next(iter(known.values())))
    pressure = trial.pressure_kpa[complete]
    if complete.sum() < FEWEST or float(np.ptp(pressure)) < SMALLEST_KPA:
        return None
    signal = trial.signal[complete] - trial.signal[complete].mean()
    products, ranges = {}, {}
    for name, values in known.items():
        x = values[complete]
        columns = np.column_stack([np.ones(len(x)), x, pressure, x * pressure, signal])
        products[name] = columns.T @ columns
        ranges[name] = (float(x.min()), float(x.max()))
    low, high = float(pressure.min()), float(pressure.max())
    return LoggedPressure(products, ranges, low, high, int(complete.sum()))
