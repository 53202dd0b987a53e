"""Many minimisations at once."""

import numpy as np
import pytest

from campaign.methods.batched_minimiser import inverse_curvature, minimise_many


def test_valleys_of_different_steepness_are_followed_to_their_ends():
    steep = np.array([1.0, 10.0, 100.0])

    def valley(x, which):
        c = steep[which]
        value = c * (x[1] - x[0] ** 2) ** 2 + (1.0 - x[0]) ** 2
        slope = np.array(
            [-4.0 * c * x[0] * (x[1] - x[0] ** 2) - 2.0 * (1.0 - x[0]), 2.0 * c * (x[1] - x[0] ** 2)]
        )
        return value, slope

    start = np.array([[-1.2, -1.2, -1.2], [1.0, 1.0, 1.0]])
    found = minimise_many(valley, start, np.repeat(np.eye(2)[:, :, None], 3, axis=2), tolerance=1e-14)
    assert found.converged.all()
    assert found.x == pytest.approx(np.ones((2, 3)), abs=1e-5)


def test_a_wall_of_infinity_is_walked_round():
    def log_barrier(x, which):
        with np.errstate(invalid="ignore", divide="ignore"):
            value = np.where(x[0] > 0.0, x[0] - np.log(x[0]), np.inf)
        return value, 1.0 - 1.0 / x

    found = minimise_many(log_barrier, np.array([[0.05]]), np.ones((1, 1, 1)), tolerance=1e-12)
    assert found.x[0, 0] == pytest.approx(1.0, abs=1e-5)


def test_steps_are_no_longer_than_allowed():
    seen = []

    def slope(x, which):
        seen.append(x[0, 0])
        return (x[0] - 10.0) ** 2, 2.0 * (x - 10.0)

    minimise_many(slope, np.zeros((1, 1)), np.ones((1, 1, 1)), tolerance=1e-10, longest=np.array([1.0]))
    assert np.abs(np.diff(seen)).max() <= 1.0 + 1e-12
    assert seen[-1] == pytest.approx(10.0)


def test_each_ends_at_its_own_tolerance_and_further_rows_come_back():
    def quartic(x, which):
        rows = np.vstack([4.0 * (x - 1.0) ** 3, 10.0 + which])
        return ((x - 1.0) ** 4)[0], rows

    start, steep = np.full((1, 2), 3.0), np.full((1, 1, 2), 0.02)
    found = minimise_many(quartic, start, steep, tolerance=np.array([1e-1, 1e-9]))
    assert found.converged.all()
    assert 1e-1 > found.promise[0] > 1e-9 > found.promise[1]
    assert abs(found.x[0, 1] - 1.0) < 0.1 * abs(found.x[0, 0] - 1.0)
    assert found.gradient[0] == pytest.approx(4.0 * (found.x[0] - 1.0) ** 3)
    assert found.gradient[1].tolist() == [10.0, 11.0]


def test_inverse_curvature_is_positive_definite():
    hessian = np.array([[4.0, 1.0], [1.0, 3.0]])
    stack = np.stack([hessian, np.diag([1.0, -2.0])], axis=2)
    inverse = inverse_curvature(stack)
    assert inverse[:, :, 0] == pytest.approx(np.linalg.inv(hessian))
    assert (np.linalg.eigvalsh(inverse.transpose(2, 0, 1)) > 0.0).all()
