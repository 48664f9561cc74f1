"""Draws of variances and correlations against the laws they come from."""

import numpy as np
import pytest
from scipy import stats

from identkit.methods.variance_uncertainty import drawn_correlation, drawn_variances


def test_without_anything_below_the_law_is_the_textbook_interval():
    # s^2 nu / chi^2: the interval of a variance, NIST/SEMATECH e-Handbook 1.3.5.8 (chi-square)
    rng = np.random.default_rng(1)
    draws = drawn_variances(np.full(40000, 4.0), np.zeros(40000), 9, rng.chisquare(9, 40000))
    limits = 9 * 4.0 / stats.chi2.ppf([0.975, 0.025], 9)
    np.testing.assert_allclose(np.quantile(draws, [0.025, 0.975]), limits, rtol=0.04)


def test_a_component_drowned_in_noise_may_be_none_or_some():
    rng = np.random.default_rng(2)
    draws = drawn_variances(np.zeros(20000), np.ones(20000), 20, rng.chisquare(20, 20000))
    assert draws.min() == 0.0
    # positive where chi^2 is below its degrees of freedom
    assert np.mean(draws > 0.0) == pytest.approx(stats.chi2.cdf(20, 20), abs=0.015)


def test_no_freedom_leaves_the_estimate():
    np.testing.assert_array_equal(drawn_variances(np.array([2.0]), np.array([1.0]), 0, None), [2.0])


def test_correlations_scatter_as_fisher_says():
    # R. A. Fisher, Metron 1 (1921): atanh r has standard error 1 / sqrt(n - 3), n = freedom + 1
    rng = np.random.default_rng(3)
    truth = np.array([[1.0, 0.6], [0.6, 1.0]])
    drawn = [drawn_correlation(truth, 25, 1.0, rng) for _ in range(4000)]
    scale = np.arctanh([matrix[0, 1] for matrix, _ in drawn])
    assert scale.mean() == pytest.approx(np.arctanh(0.6), abs=0.03)
    assert scale.std() == pytest.approx(1.0 / np.sqrt(23), rel=0.06)
    assert np.mean([chi for _, chi in drawn]) == pytest.approx(25.0, rel=0.02)


def test_a_draw_of_fewer_than_quantities_is_still_positive_definite():
    rng = np.random.default_rng(4)
    matrix, chi_square = drawn_correlation(np.eye(30), 12, 1.0, rng)
    np.linalg.cholesky(matrix)
    np.testing.assert_allclose(np.diag(matrix), 1.0)
    assert chi_square.shape == (30,)
