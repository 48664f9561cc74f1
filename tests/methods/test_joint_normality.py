"""The test of normality keeps its level and sees skewed spreads and lots."""

import numpy as np
import pytest

from identkit.methods.joint_normality import normality_test

UNITS, QUANTITIES = 16, 12
CORRELATION = 0.7 * np.eye(QUANTITIES) + 0.3
ROOT = np.linalg.cholesky(CORRELATION)


def normal(seed):
    rng = np.random.default_rng(seed)
    return rng.standard_normal((UNITS, QUANTITIES)) @ ROOT.T


def test_normal_samples_fail_no_more_often_than_stated():
    # 20 samples at 5 %: 5 or more happen by chance in 0.3 % of runs
    failed = sum(
        normality_test(normal(k), CORRELATION, seed=k).probability < 0.05 for k in range(20)
    )
    assert failed < 5


def test_skewed_units_are_noticed():
    rng = np.random.default_rng(3)
    samples = rng.standard_exponential((UNITS, QUANTITIES))
    found = normality_test(samples, np.eye(QUANTITIES))
    assert found.probability < 0.01
    assert found.statistic in ("skewness", "kurtosis")


def test_two_lots_are_noticed():
    samples = normal(5)
    samples[: UNITS // 2] += 5.0
    found = normality_test(samples, CORRELATION)
    assert found.probability < 0.05
    assert found.statistic == "two groups of units"


def test_a_lot_that_differs_in_one_quantity_is_noticed():
    samples = normal(6)
    samples[: UNITS // 3, 4] += 8.0
    found = normality_test(samples, CORRELATION)
    assert found.probability < 0.05
    assert found.statistic == "two groups in one quantity"


def test_units_of_measurement_do_not_matter():
    samples = normal(7)
    scaled = samples * np.geomspace(1e-6, 1e9, QUANTITIES)
    assert normality_test(scaled, CORRELATION).probability == pytest.approx(
        normality_test(samples, CORRELATION).probability
    )


def test_quantities_that_do_not_vary_are_left_out():
    samples = normal(8)
    samples[:, 2] = 0.0
    assert 0.0 < normality_test(samples, CORRELATION).probability <= 1.0


def test_few_units_say_nothing():
    found = normality_test(normal(9)[:7], CORRELATION)
    assert np.isnan(found.probability)
    assert found.statistic == ""
