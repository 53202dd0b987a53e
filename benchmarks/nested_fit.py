"""The nested fit against lme4 in one run: time, criterion, and what the intervals and refits cost.

Run with ``python -m benchmarks.nested_fit``; prints one markdown table. Uses one core. Where R with lme4 is
not present it says so and takes statsmodels' MixedLM for the comparison of time instead (on the smallest
design, and with uncorrelated lines: it cannot fit the model itself).
"""

from __future__ import annotations

import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
import numpy.typing as npt

from campaign.methods.nested_model import (
    NestedModel,
    NestedModelFit,
    RandomTerm,
    bootstrap_refits,
    fit_nested_model,
    profile_intervals,
)

FloatArray = npt.NDArray[np.float64]
LEVELS = ("module", "sensor", "trial")

R_SCRIPT = """
suppressMessages(library(lme4))
given <- commandArgs(TRUE)
d <- read.csv(given[1], colClasses = c("factor", "factor", "factor", "factor", "numeric", "numeric"))
formula <- if (nlevels(d$generation) > 1)
  y ~ 0 + generation + generation:x + (1 + x | module) + (1 + x | sensor) + (1 + x | trial) else
  y ~ 1 + x + (1 + x | module) + (1 + x | sensor) + (1 + x | trial)
one <- function(...) {
  began <- sum(proc.time()[1:2])
  fit <- suppressMessages(suppressWarnings(lmer(formula, d, REML = TRUE, ...)))
  list(seconds = sum(proc.time()[1:2]) - began, criterion = -2 * as.numeric(logLik(fit)),
       singular = isSingular(fit))
}
quiet <- list(check.conv.singular = "ignore", check.conv.grad = "ignore", check.conv.hess = "ignore")
say <- function(name, r) cat(sprintf("%s,%.6f,%.12f,%d\\n", name, r$seconds, r$criterion, r$singular))
say("default", one())
{
  say("bobyqa", one(control = do.call(lmerControl, c(list(optimizer = "bobyqa",
    optCtrl = list(maxfun = 1e6, rhoend = 1e-9), calc.derivs = FALSE), quiet))))
  say("nloptwrap", one(control = do.call(lmerControl, c(list(optimizer = "nloptwrap",
    optCtrl = list(maxeval = 1e5, xtol_abs = 1e-12, ftol_abs = 1e-12), calc.derivs = FALSE), quiet))))
  say("Nelder_Mead", one(control = do.call(lmerControl, c(list(optimizer = "Nelder_Mead",
    optCtrl = list(maxfun = 1e6, FtolAbs = 1e-12, XtolRel = 1e-12), calc.derivs = FALSE), quiet))))
}
"""


@dataclass(frozen=True)
class Design:
    """Generations × modules × sensors × trials × readings.

    Unbalanced: 5 % of the sensors and of the readings and 10 % of the trials are lost.
    """

    generations: int
    modules: int
    sensors: int
    trials: int
    readings: int
    balanced: bool = True

    @property
    def name(self) -> str:
        """As it is written: 2×12×4×3×9."""
        sizes = (self.generations, self.modules, self.sensors, self.trials, self.readings)
        return "×".join(str(size) for size in sizes) + ("" if self.balanced else " unbalanced")


@dataclass(frozen=True)
class Campaign:
    """Invented readings of a design: codes of units and the line's two columns."""

    generation: npt.NDArray[np.int64]
    units: dict[str, npt.NDArray[np.int64]]
    x: FloatArray
    y: FloatArray

    def model(self) -> NestedModel:
        """A line at every level about a line a generation."""
        line = np.column_stack([np.ones_like(self.x), self.x])
        groups = np.unique(self.generation)
        fixed = np.column_stack([(self.generation == g)[:, None] * line for g in groups])
        return NestedModel(
            response=self.y,
            fixed=fixed,
            fixed_names=tuple(f"{g}{part}" for g in groups for part in (" intercept", " slope")),
            levels=tuple(self.units.items()),
            terms=tuple(RandomTerm(name, name, line) for name in LEVELS),
        )

    def write(self, file: Path) -> None:
        """As a table that R reads."""
        columns = np.column_stack([self.generation, *self.units.values()])
        with file.open("w") as out:
            out.write("generation,module,sensor,trial,x,y\n")
            for codes, x, y in zip(columns, self.x, self.y, strict=True):
                out.write(",".join(f"u{code}" for code in codes) + f",{float(x)!r},{float(y)!r}\n")


def invent(design: Design, seed: int = 1) -> Campaign:
    """Draw a campaign; correlated lines at three levels, noise 0.004."""
    random = np.random.default_rng(seed)
    sizes = (design.generations, design.modules, design.sensors, design.trials, design.readings)
    g, m, s, t, i = np.indices(sizes).reshape(5, -1)
    units = {"module": g * design.modules + m}
    units["sensor"] = units["module"] * design.sensors + s
    units["trial"] = units["sensor"] * design.trials + t
    x = 0.5 * i / (design.readings - 1)
    y = 0.002 * g + (0.95 + 0.05 * g) * x + 0.004 * random.standard_normal(len(x))
    for name, sds, correlation in (
        ("module", (0.004, 0.03), 0.3),
        ("sensor", (0.006, 0.04), -0.3),
        ("trial", (0.002, 0.01), 0.2),
    ):
        covariance = np.outer(sds, sds) * np.array([[1.0, correlation], [correlation, 1.0]])
        effects = random.multivariate_normal([0.0, 0.0], covariance, units[name].max() + 1)
        y = y + effects[units[name], 0] + effects[units[name], 1] * x
    kept = np.ones(len(x), dtype=bool)
    if not design.balanced:
        kept &= random.random(units["sensor"].max() + 1)[units["sensor"]] >= 0.05
        kept &= random.random(units["trial"].max() + 1)[units["trial"]] >= 0.10
        kept &= random.random(len(x)) >= 0.05
    return Campaign(g[kept], {name: unit[kept] for name, unit in units.items()}, x[kept], y[kept])


def best_time(action: Callable[[], object], times: int = 5) -> float:
    """Shortest processor time of several runs, s."""
    found = []
    for _ in range(times):
        began = time.process_time()
        action()
        found.append(time.process_time() - began)
    return min(found)


def lme4_of(campaign: Campaign) -> dict[str, tuple[float, float]]:
    """Optimiser → (seconds, criterion) of lme4 1.1 in R; 'default' is lmer without any setting."""
    with tempfile.TemporaryDirectory() as folder:
        script, data = Path(folder) / "fit.R", Path(folder) / "readings.csv"
        script.write_text(R_SCRIPT)
        campaign.write(data)
        command = ["Rscript", "--vanilla", str(script), str(data)]
        text = subprocess.run(command, capture_output=True, text=True, check=True).stdout
    rows = [line.split(",") for line in text.splitlines()]
    return {name: (float(seconds), float(criterion)) for name, seconds, criterion, _ in rows}


def has_lme4() -> bool:
    """Whether R with lme4 is there."""
    if shutil.which("Rscript") is None:
        return False
    asked = subprocess.run(["Rscript", "--vanilla", "-e", "library(lme4)"], capture_output=True, check=False)
    return asked.returncode == 0


def statsmodels_seconds(campaign: Campaign) -> float:
    """Time of MixedLM with uncorrelated lines at three levels, s."""
    from statsmodels.regression.mixed_linear_model import MixedLM, VCSpec

    module = campaign.units["module"]
    line = campaign.model().terms[0].columns
    names, labels, matrices = [], [], []
    for level in LEVELS:
        for k in range(2):
            names.append(f"{level}{k}")
            mine = []
            for one in np.unique(module):
                unit = campaign.units[level][module == one]
                mine.append(np.column_stack([(unit == u) * line[module == one, k] for u in np.unique(unit)]))
            matrices.append(mine)
            labels.append([[str(j) for j in range(matrix.shape[1])] for matrix in mine])
    began = time.process_time()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model = MixedLM(campaign.y, campaign.model().fixed, module, exog_vc=VCSpec(names, labels, matrices))
        model.fit(reml=True)
    return time.process_time() - began


def compared_rows(with_lme4: bool) -> Iterator[tuple[str, str, str, str]]:
    """Rows of the table that compare with another program."""
    targets = {
        Design(2, 12, 4, 3, 9): 25,
        Design(2, 12, 4, 3, 9, balanced=False): 25,
        Design(3, 40, 6, 5, 11): 100,
        Design(3, 40, 6, 5, 11, balanced=False): 100,
    }
    for design, target in targets.items():
        campaign = invent(design)
        model = campaign.model()
        seconds = best_time(lambda model=model: fit_nested_model(model))  # type: ignore[misc]
        fit = fit_nested_model(model)
        readings = f"{design.name}, {len(campaign.y):,} readings"
        yield f"fit, {readings}", f"{1000 * seconds:.1f} ms", "", _evidence(fit)
        if with_lme4:
            theirs = lme4_of(campaign)
            default = theirs["default"][0]
            best = min(criterion for _, criterion in theirs.values())
            yield (
                "— times faster than lme4, default",
                f"{default / seconds:.0f}",
                f"≥ {target}",
                f"lme4 {default:.2f} s",
            )
            above = fit.criterion - best
            yield "— criterion above the best of three tight lme4", f"{above:.1e}", "≤ 1e-6", f"{best:.9f}"
            short = theirs["default"][1] - fit.criterion
            yield "— criterion of lme4, default, above ours", f"{short:.1e}", "", ""
        elif target == 25:
            other = statsmodels_seconds(campaign)
            yield (
                "— times faster than statsmodels",
                f"{other / seconds:.0f}",
                "",
                f"statsmodels {other:.2f} s",
            )


def _evidence(fit: NestedModelFit) -> str:
    return f"{fit.evaluations} evaluations, certificate {min(fit.certificate.values()):.0e}"


def own_rows() -> Iterator[tuple[str, str, str, str]]:
    """Rows of the table about this engine alone."""
    seconds, megabytes = large_fit_alone()
    yield "fit, 3×60×17×5×11, 168,300 readings", f"{seconds:.2f} s", "< 0.5 s", ""
    yield "— memory above the imports and the data", f"{megabytes:.0f} MB", "< 100 MB", ""
    for balanced in (True, False):
        model = invent(Design(1, 6, 5, 3, 8, balanced)).model()
        fit = fit_nested_model(model)
        name = Design(1, 6, 5, 3, 8, balanced).name
        asked = [(level, [1.0, x]) for level in LEVELS for x in (0.0, 0.25, 0.5)]
        asked += [(level, [0.0, 1.0]) for level in LEVELS] + [("residual", [1.0])]
        seconds = best_time(lambda fit=fit, asked=asked: profile_intervals(fit, asked), 3)  # type: ignore[misc]
        yield (
            f"{len(asked)} profile intervals, {name}",
            f"{seconds:.2f} s",
            "< 2 s",
            "three places, slope, residual",
        )
        seconds = best_time(lambda fit=fit: bootstrap_refits(fit, 1000, 1), 1)  # type: ignore[misc]
        yield f"1,000 bootstrap refits, {name}", f"{seconds:.2f} s", "< 5 s", ""


def large_fit_alone() -> tuple[float, float]:
    """Time and memory of the largest fit in a process of its own: s, MB above the imports and the data."""
    command = [sys.executable, __file__, "--large"]
    answer = json.loads(subprocess.run(command, capture_output=True, text=True, check=True).stdout)
    return float(answer["seconds"]), float(answer["megabytes"])


def measure_large_fit() -> None:
    """Print time and memory of the largest fit as JSON."""
    model = invent(Design(3, 60, 17, 5, 11)).model()
    small = invent(Design(1, 3, 2, 2, 4)).model()
    fit_nested_model(small)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    fit_nested_model(model)
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    seconds = best_time(lambda: fit_nested_model(model), 4)
    print(json.dumps({"seconds": seconds, "megabytes": (after - before) / 1024}))


def main() -> None:
    """Print the table."""
    if sys.argv[1:] == ["--large"]:
        measure_large_fit()
        return
    with_lme4 = has_lme4()
    if not with_lme4:
        print("R with lme4 is not present: compared with statsmodels, uncorrelated lines, smallest design.\n")
    print("| what | measured | wanted | remark |\n|---|---|---|---|")
    for rows in (own_rows(), compared_rows(with_lme4)):
        for row in rows:
            print("| " + " | ".join(row) + " |", flush=True)


if __name__ == "__main__":
    main()
