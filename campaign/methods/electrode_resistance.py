"""What electrode resistance does to a measured capacitance: a distributed RC line, open at its end.

Z = (R/γ) coth γ with γ = √(jωRC), R the resistance of the electrodes along their length and C the
capacitance.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import optimize

FloatArray = npt.NDArray[np.float64]
Model = Literal["parallel", "series"]


def capacitance_seen(omega_rc: FloatArray | float, model: Model) -> FloatArray:
    """Return the capacitance that a meter shows, divided by the true one.

    Parameters
    ----------
    omega_rc
        2π × frequency × resistance × capacitance, dimensionless, above 0.
    model
        Equivalent circuit of the meter: ``"parallel"`` or ``"series"``.
    """
    omega_rc = np.asarray(omega_rc, dtype=np.float64)
    gamma = np.sqrt(1j * omega_rc)
    impedance = 1.0 / (gamma * np.tanh(gamma))
    if model == "parallel":
        return np.asarray(np.imag(1.0 / impedance) / omega_rc)
    return np.asarray(-1.0 / (omega_rc * np.imag(impedance)))


def omega_rc_of_error(error: float, model: Model) -> float:
    """Return the ωRC at which the capacitance shown is low by *error* (a share, such as 0.01)."""

    def excess(omega_rc: float) -> float:
        return float(1.0 - capacitance_seen(omega_rc, model) - error)

    return float(optimize.brentq(excess, 1e-6, 50.0, xtol=1e-14))
