"""Levenberg-Marquardt search: exact on linear problems, honest on impossible ones."""

import numpy as np
import pytest

from identkit.methods.levenberg_marquardt import damped_step, least_squares, minimise


def line_problem(rng):
    design = np.column_stack([np.ones(40), np.linspace(0.0, 1e6, 40)])
    return design, design @ [2.0, 3e-6] + 0.1 * rng.standard_normal(40)


def test_linear_problem_equals_ordinary_least_squares():
    design, data = line_problem(np.random.default_rng(0))
    fit = least_squares(lambda b: data - design @ b, lambda b: -design, np.zeros(2))
    exact, total, _, _ = np.linalg.lstsq(design, data)
    np.testing.assert_allclose(fit.point, exact, rtol=1e-12)
    expected = np.linalg.inv(design.T @ design) * total[0] / 38
    np.testing.assert_allclose(fit.covariance, expected, rtol=1e-8)
    assert fit.converged


def test_step_survives_a_dependent_pair_of_columns():
    hessian = np.ones((2, 2))
    step = damped_step(hessian, np.ones(2), 0.0)
    assert np.isfinite(step).all()
    assert hessian @ step == pytest.approx(np.ones(2), rel=1e-6)


def test_forbidden_points_are_not_entered():
    def evaluate(x):
        cost = float((x[0] + 3.0) ** 2) if x[0] >= 1.0 else np.inf
        return cost, x

    found = minimise(evaluate, lambda x: (np.eye(1), -(x + 3.0)), np.array([5.0]))
    assert found.point[0] >= 1.0
    assert np.isfinite(found.cost)


def test_does_not_claim_success_when_the_gradient_lies():
    found = minimise(
        lambda x: (float(1.0 + x[0] ** 2), x), lambda x: (np.eye(1), x + 1.0), np.array([0.0])
    )
    assert not found.converged


def test_step_limit_holds():
    seen = []

    def evaluate(x):
        seen.append(x[0])
        return float((x[0] - 10.0) ** 2), x

    minimise(evaluate, lambda x: (np.eye(1), 10.0 - x), np.zeros(1), step_limit=np.array([0.5]))
    assert max(np.diff(seen)) <= 0.5 + 1e-12
    assert seen[-1] == pytest.approx(10.0, abs=1e-3)
