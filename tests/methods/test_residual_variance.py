"""Variance of points: estimated, freed of bias, freed of scatter."""

import numpy as np
import pytest

from identkit.methods.modal_least_squares import starting_poles
from identkit.methods.modal_model import modal_response
from identkit.methods.modal_problem import ModalProblem, ModelShape
from identkit.methods.modal_solution import fitted_response, scale_data, solve
from identkit.methods.residual_variance import start_variance, updated_variance
from tests.methods.invented_plants import draw


def fitted(drawn, variance):
    data = scale_data(drawn.frequency, drawn.response, variance)
    shape = ModelShape(drawn.truth.base, drawn.truth.modal_frequency.size)
    return solve(ModalProblem(data, shape), starting_poles(drawn.truth, data.reference))


@pytest.mark.parametrize("floor", [0.0, 0.05])
def test_estimated_variance_is_near_the_true_one(floor):
    drawn = draw(np.random.default_rng(1), modes=4, floor=floor, even=True)
    solution = fitted(drawn, drawn.variance)
    found = updated_variance(solution, drawn.response, drawn.variance, True)
    ratio = found / drawn.variance
    assert np.median(ratio) == pytest.approx(1.0, abs=0.15)
    assert np.quantile(ratio, 0.02) > 0.5
    assert np.quantile(ratio, 0.98) < 2.0


def test_first_variance_is_of_the_right_size():
    drawn = draw(np.random.default_rng(2), modes=4)
    ratio = start_variance(drawn.frequency, drawn.response) / drawn.variance
    assert np.median(ratio) == pytest.approx(1.0, abs=0.25)


def test_few_points_get_a_relative_variance():
    response = np.array([1.0 + 1j, 2.0, 3.0j])
    found = start_variance(np.arange(1.0, 4.0), response)
    np.testing.assert_allclose(found, 1e-4 * np.abs(response) ** 2)


def test_a_smooth_stated_variance_is_left_alone():
    drawn = draw(np.random.default_rng(3), modes=4)
    solution = fitted(drawn, drawn.variance)
    found = updated_variance(solution, drawn.response, drawn.variance, False)
    np.testing.assert_array_equal(found, drawn.variance)


def test_weights_from_measured_size_are_moved_to_the_model():
    drawn = draw(np.random.default_rng(4), modes=4, noise=0.1)
    measured = (0.1 * np.abs(drawn.response)) ** 2
    found = updated_variance(fitted(drawn, measured), drawn.response, measured, False)
    before, after = (np.std(np.log(v / drawn.variance)) for v in (measured, found))
    assert after < 0.35 * before


def test_scatter_of_few_averages_is_smoothed():
    rng = np.random.default_rng(5)
    drawn = draw(rng, modes=4)
    scattered = drawn.variance * rng.gamma(8, 1 / 8, drawn.variance.size)
    found = updated_variance(fitted(drawn, scattered), drawn.response, scattered, False)
    before, after = (np.std(np.log(v / drawn.variance)) for v in (scattered, found))
    assert after < 0.4 * before


def test_true_wiggles_of_the_variance_are_kept():
    rng = np.random.default_rng(6)
    drawn = draw(rng, modes=4)
    rough = np.where(np.arange(1200) % 3 == 0, 9.0, 1.0)
    clean = modal_response(drawn.frequency, drawn.truth)
    response = clean + (drawn.response - clean) * np.sqrt(rough)
    drawn = type(drawn)(drawn.frequency, response, drawn.variance * rough, drawn.truth)
    found = updated_variance(fitted(drawn, drawn.variance), response, drawn.variance, False)
    np.testing.assert_array_equal(found, drawn.variance)


def test_fitted_response_is_the_model_with_its_delay():
    drawn = draw(np.random.default_rng(7), modes=4)
    solution = fitted(drawn, drawn.variance)
    off = fitted_response(solution) - modal_response(drawn.frequency, drawn.truth)
    assert np.median(np.abs(off) ** 2 / drawn.variance) < 0.05
