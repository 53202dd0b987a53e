"""Which readings the nested models are fitted to, and the models that they lead to.

Single readings at levels of their own and runs before a generation's sensors have settled are left out, each
with a notice; what remains gives one model a generation and a pooled one, of the signal and of its ratio to
the session's zero signal.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.run_settling import Settling, find_settling, number_runs
from campaign.analyses.seeds import seed_from
from campaign.analyses.variance_fit import choose_places, session_zeros
from campaign.analyses.variance_model import VarianceModel, build_model
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN, ReferenceQuantity

FloatArray = npt.NDArray[np.float64]

WITHHELD = "components of spread are not estimated"


def fitted_readings(
    readings: pd.DataFrame, notices: list[Notice]
) -> tuple[pd.DataFrame, dict[str, Settling]]:
    """Return the rows that are fitted, and from which run on each generation's runs are alike."""
    used = readings[readings["used"].astype(bool)]
    used = used[np.isfinite(used["x"].to_numpy(float)) & np.isfinite(used["signal"].to_numpy(float))]
    if used.empty:
        notices.append(spread_notice("no-readings", "no staircase reading is used", WITHHELD))
        return used, {}
    used = _with_common_levels(used, notices)
    settling = _find_all_settling(used)
    return _settled_runs(used, settling, notices), settling


def signal_models(readings: pd.DataFrame) -> tuple[VarianceModel, ...]:
    """Return the models of the signal that readings lead to: one a generation, then the pooled one.

    They hold design and response and are not fitted yet. A table read back from ``readings.csv`` will do.
    """
    kept, _ = fitted_readings(readings, [])
    return tuple(build_all(kept, kept["signal"].to_numpy(float)))


def places_of(
    readings: pd.DataFrame, reference: ReferenceQuantity, description: Description
) -> dict[str, float]:
    """Return where components are stated: :func:`campaign.analyses.variance_fit.choose_places`."""
    rated = _rated(description, reference)
    return choose_places(readings["x"].to_numpy(float), rated, has_zero=_has_zero(reference))


def _rated(description: Description, reference: ReferenceQuantity) -> float:
    if reference == STRAIN:
        return description.range_strain
    return description.range_elongation_mm if reference.name == "elongation" else float("nan")


def _has_zero(reference: ReferenceQuantity) -> bool:
    return reference.name != "length"


def _with_common_levels(readings: pd.DataFrame, notices: list[Notice]) -> pd.DataFrame:
    """Leave out single readings at levels that hardly any run visits, where all others have common levels."""
    known = readings["nominal_level"].notna()
    if known.all() or known.mean() < 0.9:
        return readings
    left_out = int((~known).sum())
    notices.append(
        spread_notice(
            "level-not-common",
            f"{left_out} readings lie at levels that fewer than half of the runs visit",
            "they are left out of the components of spread, nowhere else",
            count=left_out,
        )
    )
    return readings[known]


def _find_all_settling(readings: pd.DataFrame) -> dict[str, Settling]:
    parts = readings.groupby("generation", sort=True)
    return {str(name): find_settling(part, str(name)) for name, part in parts}


def _settled_runs(
    readings: pd.DataFrame, settling: dict[str, Settling], notices: list[Notice]
) -> pd.DataFrame:
    """Leave out the runs before a generation's sensors have settled, with a notice."""
    first = readings["generation"].map({name: s.first_settled for name, s in settling.items()})
    early = number_runs(readings) < first.to_numpy()
    for name, found in settling.items():
        if found.first_settled > 1:
            notices.append(
                spread_notice(
                    "runs-before-settling",
                    f"{name}: the run number matters (F = {found.statistic:.3g}, p = {found.p:.2g})",
                    f"runs before number {found.first_settled} do not enter the components of spread",
                    "condition sensors by some cycles after mounting",
                )
            )
    return readings[~early]


def build_all(readings: pd.DataFrame, response: FloatArray) -> Iterator[VarianceModel]:
    """Yield the models of the generations, then the pooled one."""
    names = sorted(set(readings["generation"]))
    generation = readings["generation"].to_numpy()
    for name in names:
        rows = generation == name
        yield build_model(readings[rows], response[rows], str(name))
    if len(names) > 1:
        yield build_model(readings, response, "all")


def ratio_models(
    readings: pd.DataFrame, places: dict[str, float], notices: list[Notice]
) -> tuple[VarianceModel, ...]:
    """Return the models of y/y0; none where some session has no zero signal."""
    zeros = session_zeros(readings, places["zero"], number_runs(readings))
    zero = zeros["zero_signal"].to_numpy(float)
    if not np.isfinite(zero).all() or (np.abs(zero) <= 1e-6 * np.abs(readings["signal"]).max()).any():
        notices.append(
            spread_notice(
                "no-zero-signal",
                "not every session has a usable signal at zero",
                "ratios to the session's zero signal are not analysed",
                "start every session at the rest length",
            )
        )
        return ()
    kept = readings[~zeros["is_zero"].to_numpy()]
    ratio = kept["signal"].to_numpy(float) / zero[~zeros["is_zero"].to_numpy()]
    return tuple(build_all(kept, ratio))


def seed_of(readings: pd.DataFrame) -> int:
    """Return a seed that depends on the readings alone, so that a report repeats to the byte."""
    words = [readings[column] for column in ("generation", "module", "sensor", "session", "trial")]
    return seed_from(words, [readings["x"], readings["signal"]])


def spread_notice(code: str, what: str, done: str, remedy: str = "", count: int = 1) -> Notice:
    """Return a notice about the fits of the spread, which is about no single recording."""
    return Notice(code, "noted", None, None, None, what, done, remedy, count)
