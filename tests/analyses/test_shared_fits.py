"""A fit is the same, to the last bit, whoever made it and whether it was kept from an earlier run."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from campaign.analyses import shared_fits
from campaign.analyses.fit_checks import LIKELIHOOD, NOISE, PREDICTIONS, TESTS
from campaign.analyses.hold_figures import fit_stretches
from campaign.analyses.shared_fits import CheckedFit, FitTask, Outcome, fit_all, fit_task
from campaign.analyses.shared_work import do_all
from campaign.analyses.variance_fit import PLACES, GenerationFit
from campaign.keeping.store import open_store
from campaign.keeping.value_codec import encode
from campaign.methods.block_noise import Stretches
from campaign.methods.creep import bare_fits, fit_creep, fits_from_bare
from campaign.methods.nested_model import conditional_residuals
from campaign.workers.crew import LocalProcesses
from campaign.workers.workshop import Workshop


@pytest.fixture(scope="module")
def tasks(simulated) -> list[FitTask]:
    fits = simulated.small().by_generation
    everything = (NOISE, TESTS, LIKELIHOOD, PREDICTIONS)
    wanted = ((*PLACES, "slope"), everything), ((), ())
    return [FitTask(fit.model, dict(fit.places), *what, "pF", "mm/mm") for fit in fits for what in wanted]


def without_compression(fit: GenerationFit) -> GenerationFit:
    return replace(fit, fit=replace(fit.fit, compressed=None))


def as_bytes(outcomes: list[Outcome]) -> list[bytes]:
    bare = [o if isinstance(o, str) else replace(o, fit=without_compression(o.fit)) for o in outcomes]
    return [encode(outcome) for outcome in bare]


def test_processes_and_the_store_give_the_same_fits(
    tasks: list[FitTask], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    alone = as_bytes(fit_all(tasks, Workshop()))
    monkeypatch.setattr(shared_fits, "WORTH_READINGS", 0)
    with LocalProcesses(2) as crew, open_store(tmp_path / "results.sqlite") as store:
        assert as_bytes(fit_all(tasks, Workshop(crew, store))) == alone
    with open_store(tmp_path / "results.sqlite") as store:
        monkeypatch.setattr(shared_fits, "fit_generation", None)  # nothing is fitted any more
        assert as_bytes(fit_all(tasks, Workshop(store=store))) == alone


def test_a_kept_fit_serves_the_methods_that_go_on_from_it(tasks: list[FitTask]) -> None:
    (fresh,) = fit_all(tasks[:1], Workshop())
    assert isinstance(fresh, CheckedFit)
    assert fresh.fit.model is tasks[0].model
    assert (conditional_residuals(fresh.fit.fit) == fresh.fit.conditional).all()


def test_a_fit_and_its_random_numbers_stay_while_other_recordings_come_and_go(
    tasks: list[FitTask], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    model = tasks[0].model
    renamed = model.readings.assign(trial="elsewhere.csv").set_index(model.readings.index + 7)
    later = replace(tasks[0], model=replace(model, readings=renamed))
    with open_store(tmp_path / "results.sqlite") as store:
        (before,) = fit_all(tasks[:1], Workshop(store=store))
        monkeypatch.setattr(shared_fits, "fit_generation", None)  # nothing is fitted any more
        (after,) = fit_all([later], Workshop(store=store))
    assert isinstance(before, CheckedFit)
    assert isinstance(after, CheckedFit)
    assert before.checks.tests
    assert encode(after.checks) == encode(before.checks)
    assert after.fit.model is later.model


def test_what_cannot_be_fitted_is_a_sentence(tasks: list[FitTask]) -> None:
    model = tasks[0].model
    few = replace(model, model=replace(model.model, response=model.model.response[:3]))
    (outcome,) = fit_task(replace(tasks[0], model=few))
    assert isinstance(outcome, str)
    assert outcome


def test_kept_fits_of_holds_are_those_that_were_made(tmp_path: Path) -> None:
    generator = np.random.default_rng(3)
    starts = np.geomspace(1.0, 3000.0, 40)
    stretches = Stretches(starts, starts * 1.15, np.full(40, 20))
    task = (stretches, 5.0 + 0.3 * np.log1p(starts / 5.0) + 0.01 * generator.standard_normal(40))
    direct = bare_fits(fit_creep(*task))
    found = []
    for _ in range(2):
        with open_store(tmp_path / "results.sqlite") as store:
            found += do_all(fit_stretches, [task], Workshop(store=store), lambda _: False)
    assert [encode(one) for one in found] == [encode(direct)] * 2
    again = fits_from_bare(found[1])
    assert again is not None
    assert again.best.name == "logarithmic"
    assert fits_from_bare(bare_fits(None)) is None


def test_what_is_done_meanwhile_is_done_once_and_changes_nothing(
    tasks: list[FitTask], tmp_path: Path
) -> None:
    alone = as_bytes(fit_all(tasks, Workshop()))
    done: list[str] = []
    with open_store(tmp_path / "kept.sqlite") as store:
        assert as_bytes(fit_all(tasks, Workshop(store=store), lambda: done.append("fresh"))) == alone
        assert as_bytes(fit_all(tasks, Workshop(store=store), lambda: done.append("kept"))) == alone
        assert fit_all([], Workshop(store=store), lambda: done.append("nothing to fit")) == []
    assert done == ["fresh", "kept", "nothing to fit"]
