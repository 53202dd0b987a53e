"""How often are alike generations called different? Simulated pairs, compared by the same code as page 9.

Run ``python benchmarks/generations.py [campaigns]``: 100 campaigns of each design take some minutes of one
core. Every verdict of such a campaign is wrong, so that the share of campaigns with any is the error of the
whole family, which is claimed to be at most 5 %.

Columns: design, campaigns, with a verdict, low and high (95 % limits of that share: Clopper & Pearson,
Biometrika 26 (1934) 404), largest share of any one figure's p below 0.05, and that figure.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping

import pandas as pd
from scipy import stats

from campaign.analyses.calibration import analyse_calibration
from campaign.analyses.generation_figures import comparable_figures
from campaign.analyses.generations import Generations, Source, compare_generations
from campaign.analyses.variance import fit_generations
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN
from campaign.simulation.plan import regular_plan
from campaign.simulation.readings import simulate_readings
from campaign.simulation.truth import Components, GenerationTruth, LineSpread, LoopWidth, SignalLaw, Truth
from campaign.trials.readings import Readings

Design = Mapping[str, int]

CAMPAIGNS = 100
NAMES = ("older", "newer")
SPREAD = Components(
    module=LineSpread(0.9, 1.5, 0.3),
    sensor=LineSpread(0.8, 1.5, 0.2),
    session=LineSpread(0.15, 0.2),
    repetition=LineSpread(0.2, 0.3),
    sensor_by_level=0.15,
    residual=0.1,
)
TRUTH = Truth((GenerationTruth(SignalLaw(parasitic=0.0, per_mm=1.0), SPREAD, loop=LoopWidth(1.0, 0.2)),))
USUAL: Design = {"modules": 3, "sensors": 3, "sessions": 2, "repetitions": 2, "levels": 5}
DESIGNS: Mapping[str, tuple[Design, Design]] = {
    "3 and 3 modules": ({}, {}),
    "3 and 9 modules": ({}, {"modules": 9}),
    "6 and 6 modules, 2 and 8 runs": (
        {"modules": 6, "sessions": 0},
        {"modules": 6, "sessions": 0, "repetitions": 8},
    ),
}


def readings_of(name: str, seed: int, design: Design) -> pd.DataFrame:
    """Simulate the staircases of one generation."""
    table = simulate_readings(regular_plan(**(dict(USUAL) | dict(design)), descending=True), TRUTH, seed)
    own = {key: name + " " + table[key].astype(str) for key in ("module", "trial")}
    return table.assign(generation=name, **own)


def alike(seed: int, designs: tuple[Design, Design], *, with_spreads: bool = True) -> Generations:
    """Compare two generations that differ in nothing but how they were measured."""
    parts = [readings_of(n, 2 * seed + k, d) for k, (n, d) in enumerate(zip(NAMES, designs, strict=True))]
    description = Description("simulated", range_strain=0.4)
    readings = Readings(pd.concat(parts, ignore_index=True), STRAIN)
    calibration = analyse_calibration(readings, description, pd.DataFrame(columns=["module", "sensor"]), {})
    fits, uneven = (
        fit_generations(calibration.readings, STRAIN, description) if with_spreads else ((), frozenset())
    )
    offers = comparable_figures(description, (), calibration, fits, uneven, None, None, None)
    made = compare_generations(description, [Source("simulated", offers)], NAMES)
    assert made is not None
    return made


def row_of(words: str, designs: tuple[Design, Design], campaigns: int) -> dict[str, object]:
    """Count the campaigns in which anything was called different."""
    made = [alike(seed, designs) for seed in range(campaigns)]
    wrong = sum(len(one.decided) > 0 for one in made)
    limits = stats.binomtest(wrong, campaigns).proportion_ci(0.95, method="exact")
    low = pd.concat([one.table.assign(below=one.table["p"] < 0.05) for one in made]).groupby("figure")[
        "below"
    ]
    share = low.sum() / campaigns
    return {
        "design": words,
        "campaigns": campaigns,
        "with a verdict": wrong,
        "low": limits.low,
        "high": limits.high,
        "largest share": share.max(),
        "of": share.idxmax(),
    }


def main() -> None:
    """Simulate and print the table."""
    campaigns = int(sys.argv[1]) if len(sys.argv) > 1 else CAMPAIGNS
    table = pd.DataFrame([row_of(words, designs, campaigns) for words, designs in DESIGNS.items()])
    print(table.to_string(index=False, float_format=lambda value: f"{value:.3f}"))


if __name__ == "__main__":
    main()
