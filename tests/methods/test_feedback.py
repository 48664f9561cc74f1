"""Closing loops, and the bilinear map there and back."""

import numpy as np
import pytest

from identkit.methods.feedback import (
    bent,
    close_lower,
    closed_loop_poles,
    is_stable,
    sampled_to_continuous,
    sensitivity,
    straightened,
)
from identkit.methods.state_space import StateSpace, frequency_response
from identkit.plant_set.fields import Matrices
from identkit.plant_set.response import evaluation_points, state_space_response
from identkit.plant_set.sample import sampled

PERIOD = 1e-3
GRID = np.geomspace(1.0, 400.0, 40)


def drawn(states, outputs, inputs, seed):
    generator = np.random.default_rng(seed)
    a = 300.0 * generator.standard_normal((states, states)) - 900.0 * np.eye(states)
    return StateSpace(
        a,
        generator.standard_normal((states, inputs)),
        300.0 * generator.standard_normal((outputs, states)),
        0.1 * generator.standard_normal((outputs, inputs)),
    )


def test_closing_a_loop_is_the_lower_fraction_at_every_frequency():
    around, controller = drawn(5, 3, 4, 1), drawn(2, 2, 1, 2)
    controller = StateSpace(
        controller.A, controller.B[:, :1], controller.C[:2], controller.D[:2, :1]
    )
    closed = frequency_response(close_lower(around, controller), GRID)
    m, k = frequency_response(around, GRID), frequency_response(controller, GRID)
    # one measured output, two inputs driven: w are the first two inputs, z the first two outputs
    inner = np.linalg.solve(np.eye(2) + k @ m[:, 2:, 2:], k @ m[:, 2:, :2])
    expected = m[:, :2, :2] - m[:, :2, 2:] @ inner
    np.testing.assert_allclose(closed, expected, rtol=1e-9, atol=1e-12)


def test_poles_of_a_loop_known_by_hand():
    # 1/s^2 under k + s (filtered away): s^2 + 2 s + 5 from full states
    plant = StateSpace(
        np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([[0.0], [1.0]]), np.eye(2), np.zeros((2, 1))
    )
    none = np.zeros((0, 0))
    controller = StateSpace(none, np.zeros((0, 2)), np.zeros((1, 0)), np.array([[5.0, 2.0]]))
    poles = np.sort_complex(closed_loop_poles(plant, controller))
    np.testing.assert_allclose(poles, [-1.0 - 2.0j, -1.0 + 2.0j], atol=1e-12)
    assert is_stable(poles)
    assert not is_stable(np.array([-1.0, 0.0j]))
    assert not is_stable(np.array([1e-3 + 5j]))


def test_sensitivity_is_the_reciprocal_of_one_plus_the_loop():
    loop = drawn(4, 1, 1, 3)
    expected = 1.0 / (1.0 + frequency_response(loop, GRID)[:, 0, 0])
    np.testing.assert_allclose(
        frequency_response(sensitivity(loop), GRID)[:, 0, 0], expected, rtol=1e-10
    )


def test_the_image_of_a_sampled_system_has_its_response_at_bent_frequencies():
    continuous = drawn(4, 1, 1, 4)
    z = sampled(Matrices(continuous.A, continuous.B, continuous.C, continuous.D), PERIOD)
    image = sampled_to_continuous(StateSpace(z.A, z.B, z.C, z.D), PERIOD)
    np.testing.assert_allclose(np.sort(image.poles()), np.sort(continuous.poles()), rtol=1e-9)
    there = state_space_response(z, evaluation_points(GRID, PERIOD))[0, 0]
    here = frequency_response(image, bent(GRID, PERIOD))[:, 0, 0]
    np.testing.assert_allclose(here, there, rtol=1e-9)
    np.testing.assert_allclose(straightened(bent(GRID, PERIOD), PERIOD), GRID, rtol=1e-12)


def test_a_loop_that_is_not_well_posed_is_refused():
    none = np.zeros((0, 0))
    minus_one = StateSpace(none, np.zeros((0, 1)), np.zeros((1, 0)), -np.ones((1, 1)))
    one = StateSpace(none, np.zeros((0, 1)), np.zeros((1, 0)), np.ones((1, 1)))
    with pytest.raises(np.linalg.LinAlgError):
        close_lower(minus_one, one)
