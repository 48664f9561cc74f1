"""Leaving a unit out of a nested design, against fitting without it."""

import numpy as np
import pytest
from scipy import linalg

from identkit.methods.case_deletion import nested_means

UNITS, HEADS, TIMES = 6, 3, 2
VARIANCE = np.array([0.5, 0.2, 0.1])


@pytest.fixture
def campaign():
    rng = np.random.default_rng(2)
    unit, head, time = (a.ravel() for a in np.indices((UNITS, HEADS, TIMES)))
    fixed = np.column_stack([*(head == h for h in range(HEADS)), time - 0.3]).astype(float)
    value = (
        fixed @ [1.0, 2.0, 3.0, -0.5] + rng.normal(size=UNITS)[unit] + rng.normal(size=unit.size)
    )
    keep = rng.random(unit.size) > 0.15
    known = rng.uniform(0.01, 0.2, unit.size)
    return tuple(a[keep] for a in (value, fixed, unit, unit * HEADS + head, known))


def dense(value, fixed, unit, head, known):
    """Generalised least squares with the whole covariance."""
    same_unit, same_head = unit[:, None] == unit, head[:, None] == head
    covariance = VARIANCE[0] * same_unit + VARIANCE[1] * same_head
    covariance = covariance + np.diag(known + VARIANCE[2])
    root = linalg.cholesky(covariance, lower=True)
    a = linalg.solve_triangular(root, fixed, lower=True)
    b = linalg.solve_triangular(root, value, lower=True)
    return np.linalg.lstsq(a, b, rcond=None)[0], np.linalg.inv(a.T @ a)


def test_all_units_give_generalised_least_squares(campaign):
    found = nested_means(*campaign, VARIANCE)
    effects, covariance = dense(*campaign)
    np.testing.assert_allclose(found.effects, effects, rtol=1e-9)
    np.testing.assert_allclose(found.covariance, covariance, rtol=1e-8)


def test_each_unit_left_out_is_the_fit_of_the_others(campaign):
    found = nested_means(*campaign, VARIANCE)
    for unit in range(UNITS):
        others = tuple(column[campaign[2] != unit] for column in campaign)
        np.testing.assert_allclose(found.without_unit[unit], dense(*others)[0], rtol=1e-8)


def test_what_only_one_unit_shows_stays_without_it():
    fixed = np.array([[1.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    unit = np.array([0, 1, 2])
    value = np.array([1.0, 3.0, 7.0])
    found = nested_means(value, fixed, unit, unit, np.zeros(3), np.array([1.0, 0.0, np.nan]))
    np.testing.assert_allclose(found.without_unit, [[3.0, 7.0], [1.0, 7.0], [2.0, 7.0]])


def test_values_without_any_spread_are_means():
    unit = np.array([0, 0, 1])
    found = nested_means(np.full(3, 4.0), np.ones((3, 1)), unit, unit, np.zeros(3), np.zeros(3))
    np.testing.assert_allclose(found.without_unit, 4.0)
