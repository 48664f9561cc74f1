"""Projected problem: normal equations and linear parameters against plain linear algebra."""

import numpy as np
import pytest

from identkit.methods.modal_least_squares import starting_poles
from identkit.methods.modal_problem import ModalProblem, ModelShape, scaled_factor, times_jx
from identkit.methods.modal_solution import scale_data
from tests.methods.invented_plants import draw

CASES = [("pivot", False), ("free", True), ("none", True), ("pivot", True)]


def problem(base, general, delay=True):
    drawn = draw(np.random.default_rng(8), base=base, general=general, modes=4, points=300)
    data = scale_data(drawn.frequency, drawn.response, drawn.variance)
    shape = ModelShape(base, 4, general=general, delay=delay)
    poles = starting_poles(drawn.truth, data.reference)
    return ModalProblem(data, shape, poles.delay), poles


@pytest.mark.parametrize(("base", "general"), CASES)
def test_linear_parameters_are_least_squares(base, general):
    modal, poles = problem(base, general)
    state = modal.linearise(poles)
    design = (state.columns / np.linalg.norm(state.columns, axis=1)[:, None]).T
    exact = np.linalg.lstsq(design, modal.data.rotated(poles.delay))[0]
    np.testing.assert_allclose(design @ exact, state.model, atol=1e-7 * np.max(np.abs(state.model)))


@pytest.mark.parametrize(("base", "general"), CASES)
@pytest.mark.parametrize("delay", [True, False])
def test_gradient_agrees_with_differences_of_the_cost(base, general, delay):
    modal, poles = problem(base, general, delay)
    point = modal.pack(poles) + 1e-3
    _, state = modal.evaluate(point)
    _, gradient = modal.normal_equations(state)
    for k in range(point.size):
        step = np.zeros(point.size)
        step[k] = 1e-6
        change = modal.evaluate(point + step)[0] - modal.evaluate(point - step)[0]
        scale = np.max(np.abs(gradient))
        assert -2.0 * gradient[k] == pytest.approx(change / 2e-6, abs=1e-4 * scale)


def test_normal_equations_are_those_of_projected_derivatives():
    modal, poles = problem("pivot", True)
    state = modal.linearise(poles)
    hessian, _ = modal.normal_equations(state)
    base = np.linalg.qr((state.columns / np.linalg.norm(state.columns, axis=1)[:, None]).T)[0]
    slopes = modal.derivatives(state).T
    left = slopes - base @ (base.T @ slopes)
    size = np.sqrt(np.diag(hessian))
    np.testing.assert_allclose(
        hessian / np.outer(size, size), (left.T @ left) / np.outer(size, size), atol=1e-8
    )


def test_packing_is_reversible():
    modal, poles = problem("pivot", False)
    again = modal.unpack(modal.pack(poles))
    assert again.delay == poles.delay
    np.testing.assert_array_equal(again.log_frequency, poles.log_frequency)
    np.testing.assert_array_equal(again.log_damping, poles.log_damping)


def test_points_far_away_are_forbidden():
    modal, poles = problem("none", False)
    point = modal.pack(poles)
    point[1] = 40.0
    with np.errstate(over="ignore"):
        assert modal.evaluate(point)[0] == np.inf


def test_model_without_linear_terms_leaves_the_data():
    modal, poles = problem("none", False)
    bare = ModalProblem(modal.data, ModelShape("none", 0, feedthrough=False))
    poles = type(poles)(0.0, np.zeros(0), np.zeros(0))
    cost, state = bare.evaluate(bare.pack(poles))
    assert cost == pytest.approx(np.sum(np.abs(modal.data.target) ** 2))
    hessian, gradient = bare.normal_equations(state)
    assert hessian.shape == (1, 1)
    assert gradient[0] == pytest.approx(0.0, abs=1e-6 * cost)


def test_factor_refuses_what_is_not_finite():
    with pytest.raises(np.linalg.LinAlgError):
        scaled_factor(np.full((2, 2), np.nan))


def test_times_jx_is_a_complex_product():
    x, rows = np.array([1.0, 2.0]), np.array([[1.0, 2.0, 3.0, 4.0]])
    np.testing.assert_allclose(times_jx(rows, x), [[-3.0, -8.0, 1.0, 4.0]])
