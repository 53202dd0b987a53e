"""Reference data, model builders and a dense oracle for the tests of the nested mixed model."""

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from campaign.methods.nested_model import NestedModel, RandomTerm

REFERENCE = Path(__file__).parents[1] / "reference"


class NestedCases:
    """Tables of tests/reference and models built from them."""

    def table(self, name: str, folder: str = "mixed") -> pd.DataFrame:
        return pd.read_csv(REFERENCE / folder / f"{name}.csv", comment="#")

    def answers(self, name: str) -> dict:
        return json.loads((REFERENCE / "mixed" / f"{name}.json").read_text())

    @staticmethod
    def codes(column: pd.Series) -> np.ndarray:
        return pd.factorize(column)[0].astype(np.int64)

    def model(self, table, response, fixed, levels, terms) -> NestedModel:
        """Model of a table: fixed name → column, level names, terms (name, level, columns)."""
        return NestedModel(
            response=table[response].to_numpy(float),
            fixed=np.column_stack([np.broadcast_to(c, len(table)) for c in fixed.values()]).astype(float),
            fixed_names=tuple(fixed),
            levels=tuple((name, self.codes(table[name])) for name in levels),
            terms=tuple(
                RandomTerm(
                    n, level, np.column_stack([np.broadcast_to(c, len(table)) for c in columns]).astype(float)
                )
                for n, level, columns in terms
            ),
        )

    def intercepts(self, table, response, levels, fixed=None) -> NestedModel:
        """A random mean at every level."""
        return self.model(table, response, fixed or {"mean": 1.0}, levels, [(n, n, [1.0]) for n in levels])

    def published(self, name: str) -> NestedModel:
        """The model of one of the published sets, as its formula in tests/reference/mixed says."""
        table = self.table(name.split("_")[0])
        if name == "pastes":
            return self.intercepts(table, "strength", ["batch", "sample"])
        if name == "pastes_sample_only":
            return self.intercepts(table, "strength", ["sample"])
        if name in ("oats", "oats_variety"):
            table["BV"] = table["Block"].astype(str) + table["Variety"]
            fixed = {"mean": 1.0, "nitro": table["nitro"]}
            if name == "oats_variety":
                fixed |= {v: table["Variety"] == v for v in ("Marvellous", "Victory")}
            return self.intercepts(table, "yield", ["Block", "BV"], fixed)
        if name == "sleepstudy":
            days = table["Days"]
            return self.model(
                table,
                "Reaction",
                {"mean": 1.0, "days": days},
                ["Subject"],
                [("Subject", "Subject", [1.0, days])],
            )
        if name == "sleepstudy_uncorrelated":
            days = table["Days"]
            terms = [("Subject", "Subject", [1.0]), ("Subject.1", "Subject", [days])]
            return self.model(table, "Reaction", {"mean": 1.0, "days": days}, ["Subject"], terms)
        column, response = {"rail": ("Rail", "travel")}.get(name, ("Batch", "Yield"))
        return self.intercepts(table, response, [column])

    def campaign(self, name: str, form: str, basis: str) -> NestedModel:
        """sim_medium or sim_medium_unb: form int, dbl or full; basis x or u = (x − 0.25)/0.15."""
        table = self.table(name)
        x = table["x"] if basis == "x" else (table["x"] - 0.25) / 0.15
        fixed = {f"{g}{n}": (table["gen"] == g) * c for n, c in (("", 1.0), (":x", x)) for g in ("G1", "G2")}
        levels = ["module", "sensor", "rep"]
        terms = {
            "int": [(n, n, [1.0]) for n in levels],
            "dbl": [(n + s, n, [c]) for n in levels for s, c in (("", 1.0), (":x", x))],
            "full": [(n, n, [1.0, x]) for n in levels],
        }[form]
        return self.model(table, "y", fixed, levels, terms)

    def invented(self, seed=0, modules=5, sensors=4, runs=3, readings=6, sds=None, missing=0.0):
        """An invented campaign of lines; sds: level → (intercept, slope) SD, residual SD 0.05."""
        random = np.random.default_rng(seed)
        sds = {"module": (0.3, 0.4), "sensor": (0.2, 0.3), "run": (0.1, 0.2)} if sds is None else sds
        index = np.indices((modules, sensors, runs, readings)).reshape(4, -1)
        module, sensor = index[0], index[0] * sensors + index[1]
        run = sensor * runs + index[2]
        x = index[3] / (readings - 1)
        y = 1.0 + 2.0 * x + 0.05 * random.standard_normal(len(x))
        for name, unit in (("module", module), ("sensor", sensor), ("run", run)):
            effect = random.standard_normal((unit.max() + 1, 2)) * sds[name]
            y = y + effect[unit, 0] + effect[unit, 1] * x
        kept = random.random(len(x)) >= missing
        table = pd.DataFrame({"module": module, "sensor": sensor, "run": run, "x": x, "y": y})[kept]
        return table.reset_index(drop=True)

    def means(self, table) -> NestedModel:
        """Random means of module, sensor and run."""
        return self.intercepts(table, "y", ["module", "sensor", "run"], {"mean": 1.0, "x": table["x"]})

    def lines(self, table) -> NestedModel:
        """Random lines of module, sensor and run."""
        x = table["x"]
        levels = ["module", "sensor", "run"]
        return self.model(table, "y", {"mean": 1.0, "x": x}, levels, [(n, n, [1.0, x]) for n in levels])


class Dense:
    """The model written out with N × N matrices: slow, plain, and independent of the engine."""

    def __init__(self, model: NestedModel):
        self.model = model
        unit = np.zeros(len(model.response), dtype=np.int64)
        self.units = {}
        for name, codes in model.levels:
            unit = np.unique(np.column_stack([unit, codes]), axis=0, return_inverse=True)[1].ravel()
            self.units[name] = unit

        self.crossed = {term.name: self.designs(term) for term in model.terms}

    def designs(self, term: RandomTerm) -> list[np.ndarray]:
        """Design (N, d) of every effect of a term."""
        unit = self.units[term.level]
        if term.copies is not None:
            unit = np.unique(np.column_stack([unit, term.copies]), axis=0, return_inverse=True)[1].ravel()
        return [term.columns * (unit == k)[:, None] for k in range(unit.max() + 1)]

    def covariance(self, covariances, residual_variance):
        total = residual_variance * np.eye(len(self.model.response))
        for term in self.model.terms:
            for z in self.crossed[term.name]:
                total += z @ covariances[term.name] @ z.T
        return total

    def criterion(self, covariances, residual_variance, restricted=True):
        """−2 log (restricted) likelihood."""
        y, x = self.model.response, self.model.fixed
        v = self.covariance(covariances, residual_variance)
        inverse = np.linalg.inv(v)
        square = x.T @ inverse @ x
        rest = y - x @ np.linalg.solve(square, x.T @ inverse @ y)
        degrees = len(y) - (x.shape[1] if restricted else 0)
        value = np.linalg.slogdet(v)[1] + rest @ inverse @ rest + degrees * np.log(2 * np.pi)
        return value + (np.linalg.slogdet(square)[1] if restricted else 0.0)


@pytest.fixture(scope="session")
def nested() -> NestedCases:
    return NestedCases()


@pytest.fixture(scope="session")
def dense() -> type[Dense]:
    return Dense
