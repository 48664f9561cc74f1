"""The yardstick loop against cases worked by hand, and its own conditions checked directly."""

import numpy as np
import pytest

from identkit.methods.allowed_bandwidth import (
    Unremovable,
    allowed_bandwidth,
    complementary,
    crossover,
    limiting_frequency,
)

GRID = np.geomspace(1e-3, 1e6, 2000)
NOTHING = Unremovable()
SHAPE = np.sqrt(np.sqrt(2.0) - 1.0)  # |T0/(1 - T0)| = 1 at this share of w0


def test_a_weight_that_rises_with_frequency():
    """W = s/a: f/((f/a)^2 - 1)^(1/4) is least, sqrt(2) a, at f = sqrt(2) a."""
    found = allowed_bandwidth(lambda f: f / 100.0, GRID, NOTHING)
    assert found.natural_frequency == pytest.approx(np.sqrt(2.0) * 100.0, rel=1e-9)
    assert found.limited_at == pytest.approx(np.sqrt(2.0) * 100.0, rel=1e-5)
    assert found.crossover == pytest.approx(SHAPE * found.natural_frequency, rel=1e-9)


def test_the_condition_is_met_with_equality():
    def size(f):
        return 0.2 + 5.0 * (f / 400.0) ** 2 / (1.0 + (f / 400.0) ** 2)

    carried = Unremovable(np.array([2e4 + 0j]), 1e-5)
    found = allowed_bandwidth(size, GRID, carried)
    fine = np.geomspace(1.0, 1e5, 20001)
    t = np.abs(complementary(fine, found.natural_frequency, carried))
    assert (size(fine) * t).max() == pytest.approx(1.0, rel=1e-6)


def test_a_set_that_says_nothing_at_rest_allows_nothing():
    found = allowed_bandwidth(lambda f: np.full(f.shape, 1.2), GRID, NOTHING)
    assert found.crossover == 0.0


def test_a_small_weight_leaves_the_delay_alone_as_limit():
    """T = e^{-s tau}: Re T = 1/2 at omega tau = pi/3."""
    found = allowed_bandwidth(lambda f: np.full(f.shape, 0.3), GRID, Unremovable(delay=1e-4))
    assert found.natural_frequency == np.inf
    assert np.isnan(found.limited_at)
    assert found.crossover == pytest.approx(1.0 / (6.0 * 1e-4), rel=1e-9)


def test_a_zero_in_the_right_half_plane_alone():
    """T = (z - s)/(z + s): Re T = 1/2 where 2 atan(omega/z) = pi/3."""
    z = 2 * np.pi * 50.0
    carried = Unremovable(np.array([z + 0j]))
    found = crossover(np.inf, GRID, carried)
    assert found == pytest.approx(50.0 * np.tan(np.pi / 6.0), rel=1e-9)


def test_carried_zeros_are_zeros_of_t_and_it_is_all_pass():
    zero = 2 * np.pi * complex(30.0, 400.0)
    carried = Unremovable(np.array([zero, zero.conjugate()]), 1e-4)
    assert np.abs(np.abs(carried.all_pass(GRID)) - 1.0).max() < 1e-12
    step = 1e-7
    slope = (carried.all_pass(np.array([step]))[0] - 1.0) / (2j * np.pi * step)
    assert -slope.real == pytest.approx(carried.lag, rel=1e-5)


def test_a_double_integrator_gets_a_double_zero_of_the_sensitivity():
    carried = Unremovable(np.array([3e4 + 0j]), 2e-5, integrators=2)
    small = np.array([1e-2, 1e-3])
    s = np.abs(1.0 - complementary(small, 100.0, carried))
    assert s[1] / s[0] == pytest.approx(1e-2, rel=1e-3)

    def size(f):
        return 0.1 + 3.0 * f**2 / (f**2 + 300.0**2)

    found = allowed_bandwidth(size, GRID, carried)
    fine = np.geomspace(1.0, 1e5, 20001)
    t = np.abs(complementary(fine, found.natural_frequency, carried))
    assert (size(fine) * t).max() == pytest.approx(1.0, rel=1e-6)


def test_sensitivity_condition_is_met_with_equality():
    """|W (1 - T)| < 1 with delay: the sensitivity's peak limits."""
    carried = Unremovable(delay=1e-4)
    found = allowed_bandwidth(
        lambda f: np.full(f.shape, 0.6), GRID, carried, condition="sensitivity"
    )
    fine = np.geomspace(1.0, 1e5, 40001)
    s = np.abs(1.0 - complementary(fine, found.natural_frequency, carried))
    assert 0.6 * s.max() == pytest.approx(1.0, rel=1e-6)
    assert found.crossover < 1.0 / (6.0 * 1e-4)


def test_limiting_frequency_is_infinite_below_one():
    values = limiting_frequency(np.array([1.0, 2.0]), np.array([0.9, np.sqrt(2.0)]))
    np.testing.assert_allclose(values, [np.inf, 2.0])


def test_an_inverse_weight_that_ends_above_one_allows_no_loop():
    """However high the crossover, 1 - T is 1 beyond it."""

    def rising(f):
        return 0.1 + 1.4 * f / np.hypot(f, 500.0)

    found = allowed_bandwidth(rising, GRID, NOTHING, condition="sensitivity")
    assert found.crossover == 0.0
