"""Non-linear fits against NIST's Statistical Reference Datasets, from both published starts."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from campaign.methods.separable_fit import SeparableModel, decades_about, fit_separable

STRD = Path(__file__).parents[1] / "reference" / "strd_nonlinear"


def exponentials(terms: int, *, constant: bool, rising: bool = False) -> SeparableModel:
    """Σ cᵢ exp(−rᵢ x), or Σ cᵢ (1 − exp(−rᵢ x)), with or without a constant."""
    sign = -1.0 if rising else 1.0

    def basis(x, rates):
        columns = sign * np.exp(-np.outer(x, rates)) + (1.0 if rising else 0.0)
        return np.column_stack([np.ones_like(x), columns]) if constant else columns

    def derivatives(x, rates):
        made = np.zeros((terms, len(x), terms + constant))
        for place, rate in enumerate(rates):
            made[place, :, place + constant] = -sign * x * np.exp(-x * rate)
        return made

    return SeparableModel(basis, derivatives, terms, exchangeable=True)


POWER = SeparableModel(
    lambda x, n: (x ** n[0])[:, None], lambda x, n: (x ** n[0] * np.log(x))[None, :, None], 1
)

# Certified by NIST, StRD nonlinear regression (https://www.itl.nist.gov/div898/strd/nls/nls_main.shtml):
# model, order of the parameters here, starts of the shape parameters, certified parameters and their standard
# deviations in NIST's order.
CASES = {
    "Misra1a": (
        exponentials(1, constant=False, rising=True),
        (0, 1),
        ([0.0001], [0.0005]),
        (238.94212918, 0.00055015643181),
        (2.7070075241, 7.2668688436e-06),
    ),
    "BoxBOD": (
        exponentials(1, constant=False, rising=True),
        (0, 1),
        ([1.0], [0.75]),
        (213.80940889, 0.54723748542),
        (12.354515176, 0.10455993237),
    ),
    "MGH17": (
        exponentials(2, constant=True),
        (0, 1, 2, 3, 4),
        ([1.0, 2.0], [0.01, 0.02]),
        (0.37541005211, 1.9358469127, -1.4646871366, 0.01286753464, 0.022122699662),
        (0.0020723153551, 0.22031669222, 0.22175707739, 0.00044861358114, 0.00089471996575),
    ),
    "DanWood": (
        POWER,
        (0, 1),
        ([5.0], [4.0]),
        (0.76886226176, 3.8604055871),
        (0.01828197386, 0.051726610913),
    ),
    "Lanczos3": (
        exponentials(3, constant=False),
        (0, 2, 4, 1, 3, 5),
        ([0.3, 5.5, 7.6], [0.7, 4.2, 6.3]),
        (0.086816414977, 0.95498101505, 0.84400777463, 2.9515951832, 1.5825685901, 4.9863565084),
        (0.017197908859, 0.097041624475, 0.041488663282, 0.10766312506, 0.058371576281, 0.034436403035),
    ),
}


def in_order_of_rates(fit) -> tuple[np.ndarray, np.ndarray]:
    """Parameters and standard errors with the terms sorted by rate: terms of a sum may be swapped."""
    terms = len(fit.shape)
    first = len(fit.coefficients) - terms
    order = np.argsort(fit.shape)
    places = np.concatenate([np.arange(first), first + order, first + terms + order])
    return fit.parameters[places], fit.standard_errors[places]


@pytest.mark.parametrize("start", [0, 1])
@pytest.mark.parametrize("name", list(CASES))
def test_certified_parameters_from_both_starts(name, start):
    model, order, starts, parameters, errors = CASES[name]
    data = pd.read_csv(STRD / f"{name}.csv", comment="#")
    decades = 1.0 if name == "DanWood" else 3.0
    fit = fit_separable(
        model,
        data["x"].to_numpy(float),
        data["y"].to_numpy(float),
        decades_about(starts[start], decades),
    )
    found, spread = in_order_of_rates(fit)
    assert fit.converged
    assert found == pytest.approx([parameters[i] for i in order], rel=1e-4)
    assert spread == pytest.approx([errors[i] for i in order], rel=1e-3)


def test_too_few_points_are_refused():
    with pytest.raises(ValueError, match="2 points for 5 parameters"):
        fit_separable(
            exponentials(2, constant=True), np.arange(2.0), np.arange(2.0), decades_about([1.0, 2.0])
        )


def test_a_shape_on_its_bound_is_not_given_an_error():
    x = np.linspace(0.0, 1.0, 30)
    fit = fit_separable(exponentials(1, constant=True), x, 1.0 - x, [np.array([0.5])], low=[0.1], high=[1.0])
    assert fit.on_bound.all()
    assert np.isnan(fit.standard_errors[-1])


def test_starts_whose_columns_are_not_told_apart_do_not_win():
    x = np.linspace(1.0, 10.0, 30)
    y = 2.0 + 3.0 * np.exp(-0.7 * x)
    flat = [1e-15, 2e-15, 1e5, 2e5]  # a second constant, or nothing at all
    scan = [np.array([*flat, 0.1])]
    fit = fit_separable(exponentials(1, constant=True), x, y, scan, low=[1e-16], high=[1e6])
    assert fit.shape == pytest.approx([0.7], rel=1e-6)
    assert fit.coefficients == pytest.approx([2.0, 3.0], rel=1e-6)
