"""Control charts and their run lengths against published values and independent libraries.

Data and limits of the two handbook examples: NIST/SEMATECH e-Handbook of Statistical Methods,
6.3.2.3 (CUSUM) and 6.3.2.4 (EWMA). The other sources stand beside the values.
"""

import numpy as np
import pytest
from scipy import stats

from identkit.grids import load
from identkit.methods.change_point import change_point
from identkit.methods.control_chart_constants import (
    limit_factors,
    mean_range_factor,
    range_deviation_factor,
    unbiased_deviation_factor,
)
from identkit.methods.cusum_chart import cusum
from identkit.methods.cusum_run_length import (
    cusum_limit,
    cusum_run_length,
    one_sided_run_length,
    siegmund_run_length,
)
from identkit.methods.ewma_chart import ewma, ewma_deviation
from identkit.methods.ewma_run_length import ewma_limit, ewma_run_length
from identkit.methods.family_run_length import ChartFamily, family_limits
from identkit.methods.hotelling_chart import (
    baseline_limit,
    future_limit,
    hotelling_statistic,
    known_covariance_limit,
    known_covariance_run_length,
)
from identkit.methods.lag_one_autocorrelation import lag_one_autocorrelation
from identkit.methods.multivariate_ewma_chart import multivariate_ewma
from identkit.methods.multivariate_ewma_run_length import (
    multivariate_ewma_limit,
    multivariate_ewma_run_length,
)
from identkit.methods.recursive_residuals import joint_scores, recursive_scores
from identkit.methods.running_group_mean import running_group_scores
from identkit.methods.shewhart_individuals import individuals_limit, individuals_run_length

pytestmark = pytest.mark.outside

# Lucas and Saccucci, Technometrics 32 (1990), Table 3: pairs of in-control run length 500.
EWMA_PAIRS = [(0.5, 3.071), (0.4, 3.054), (0.25, 2.998), (0.2, 2.962), (0.1, 2.814), (0.05, 2.615)]


@pytest.mark.parametrize(
    ("size", "constants", "factors"),
    [
        (2, (0.7979, 1.1284, 0.8525), (1.88, 2.6587, 0, 3.2665, 0, 3.2665)),
        (5, (0.94, 2.3259, 0.8641), (0.5768, 1.4273, 0, 2.089, 0, 2.1145)),
        (10, (0.9727, 3.0775, 0.7971), (0.3083, 0.9754, 0.2837, 1.7163, 0.223, 1.777)),
    ],
)
def test_shewhart_constants(size, constants, factors):
    """ASTM and textbook tables; at n = 5 tables print D4 as 2.114 or 2.115."""
    found = (
        unbiased_deviation_factor(size),
        mean_range_factor(size),
        range_deviation_factor(size),
    )
    np.testing.assert_allclose(found, constants, atol=6e-5)
    names = ("A2", "A3", "B3", "B4", "D3", "D4")
    np.testing.assert_allclose([limit_factors(size)[n] for n in names], factors, atol=6e-5)


def test_ewma_of_the_handbook():
    values = [52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5]
    values += [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]
    printed = [50.6, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33]
    printed += [50.11, 49.36, 49.52, 50.05, 49.38, 49.92, 50.73, 51.23, 51.94, 51.99]
    np.testing.assert_allclose(ewma(np.array(values), 0.3, 50.0), printed, atol=0.0051)
    half = 3.0 * 2.0539 * ewma_deviation(0.3)
    # The handbook prints the lower limit cut off, 47.4115.
    np.testing.assert_allclose([50.0 + half, 50.0 - half], [52.5884, 47.4116], atol=6e-5)


def test_cusum_of_the_handbook():
    groups = [324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225]
    groups += [324.600, 324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775]
    groups += [326.875, 328.350]
    high = [0, 0, 0, 0, 0.03, 0, 0, 0, 0, 0, 0, 0, 3.01, 4.94, 7.45, 10.63, 11.99, 14.44, 16, 19.04]
    low = [0, 0.01, 0, 0.33, 0, 0, 0.56, 0.72, 0.17, 0.25, 0.31, *[0] * 9]
    upper, lower = cusum(np.array(groups) - 325.0, 0.3175)
    np.testing.assert_allclose(upper, high, atol=0.0076)
    np.testing.assert_allclose(lower, low, atol=0.0076)
    signals = np.flatnonzero(upper > 4.1959) + 1
    assert (signals[0], len(signals)) == (14, 7)


def test_tabular_cusum_of_a_chemical_concentration():
    """Montgomery and Runger, Applied Statistics and Probability for Engineers, Table 16-8."""
    values = [102.0, 94.8, 98.3, 98.4, 102.0, 98.5, 99.0, 97.7, 100.0, 98.1]
    values += [101.3, 98.7, 101.1, 98.4, 97.0, 96.7, 100.3, 101.4, 97.2, 101.0]
    high = [2, 0, 0, 0, 2, 0.5, 0, 0, 0, 0, 1.3, 0, 1.1, 0, 0, 0, 0.3, 1.7, 0, 1]
    low = [0, 3.2, 2.9, 2.5, 0, 0, 0, 0.3, 0, 0, 0, 0, 0, 0, 1, 2.3, 0, 0, 0.8, 0]
    upper, lower = cusum(np.array(values) - 99.0, 1.0)
    np.testing.assert_allclose(upper, high, atol=1e-9)
    np.testing.assert_allclose(lower, low, atol=1e-9)
    assert max(upper.max(), lower.max()) < 10.0


@pytest.mark.parametrize(
    ("limit", "published", "tolerance"),
    [
        (4.0, [168, 74.2, 26.6, 13.3, 8.38, 4.75, 3.34, 2.62, 2.19, 1.71], 3e-3),
        (5.0, [465, 139, 38, 17, 10.4, 5.75, 4.01, 3.11, 2.57, 2.01], 4e-3),
    ],
)
def test_cusum_run_lengths(limit, published, tolerance):
    """Lucas and Crosier 1982; of h = 5, 465, 10.4, 5.75 and 4.01 in public text, rest by memory."""
    shifts = (0, 0.25, 0.5, 0.75, 1, 1.5, 2, 2.5, 3, 4)
    found = [cusum_run_length(0.5, limit, shift) for shift in shifts]
    np.testing.assert_allclose(found, published, rtol=tolerance)


def test_cusum_run_lengths_with_a_head_start():
    """Lucas and Crosier, Technometrics 24 (1982), k = 0.5, h = 5, head start h/2; from memory."""
    found = [cusum_run_length(0.5, 5.0, shift, 2.5) for shift in (0, 0.5, 1, 2)]
    np.testing.assert_allclose(found, [430, 28.7, 6.35, 2.36], rtol=3e-3)


def test_cusum_limits_of_run_length_370():
    """Hawkins 1993 (limits to two decimals, from memory); run lengths of the rounded limits."""
    limits = {0.25: 8.01, 0.5: 4.77, 0.75: 3.34, 1.0: 2.52, 1.25: 1.99, 1.5: 1.61}
    exact = [370.3, 368.6, 370.6, 372.8, 373.5, 376.3]
    found = [cusum_run_length(k, h) for k, h in limits.items()]
    np.testing.assert_allclose(found, exact, atol=0.1)
    for k, h in limits.items():
        assert cusum_limit(k, 370.0) == pytest.approx(h, abs=0.011)


def test_siegmund_approximation():
    """Siegmund, Sequential Analysis, 1985; the exact value at h = 5 lies 0.8 % below."""
    at_five = (siegmund_run_length(0.5, 5.0), siegmund_run_length(0.5, 5.0, 1.0))
    np.testing.assert_allclose(at_five, [938.222, 10.336], atol=1e-3)
    at_four = (siegmund_run_length(0.5, 4.0), siegmund_run_length(0.5, 4.0, 1.0))
    np.testing.assert_allclose(at_four, [338.093, 8.343], atol=1e-3)
    assert one_sided_run_length(0.5, 5.0) == pytest.approx(2 * 465.4, rel=1e-3)


def test_ewma_pairs_of_run_length_500():
    found = [ewma_run_length(*pair) for pair in EWMA_PAIRS]
    np.testing.assert_allclose(found, 500.0, rtol=2e-3)
    for weight, limit in EWMA_PAIRS:
        assert ewma_limit(weight, 500.0) == pytest.approx(limit, abs=6e-4)


def test_ewma_run_lengths_after_a_shift():
    """Lucas and Saccucci 1990, one standard deviation; 10.3 in public text, the rest by memory."""
    found = [ewma_run_length(*pair, 1.0) for pair in EWMA_PAIRS]
    np.testing.assert_allclose(found, [17.48, 14.26, 11.14, 10.54, 10.33, 11.38], rtol=1e-3)


def test_ewma_run_length_to_ten_digits():
    """Method of Crowder 1987; a public manual of statistics prints 11.154267016."""
    assert ewma_run_length(0.25, 3.0, 1.0) == pytest.approx(11.15426702, abs=1e-8)


def test_ewma_run_length_depends_on_its_weight():
    weights = (0.05, 0.1, 0.2, 0.25, 0.4, 1.0)
    found = [ewma_run_length(weight, 3.0) for weight in weights]
    np.testing.assert_allclose(found, [1379.3, 842.1, 559.9, 502.9, 421.2, 370.4], rtol=2e-4)


def test_individuals_run_lengths():
    """Three-sigma limits, common practice; normal law."""
    found = [individuals_run_length(3.0, shift) for shift in (0, 0.5, 1, 2, 3)]
    np.testing.assert_allclose(found, [370.4, 155.22, 43.89, 6.3, 2.0], atol=6e-3)
    assert individuals_limit(370.3983) == pytest.approx(3.0, abs=1e-6)


@pytest.mark.parametrize(
    ("series", "weight", "limit"),
    [(2, 0.05, 7.35), (2, 0.1, 8.64), (2, 0.2, 9.65), (4, 0.1, 12.73), (10, 0.1, 22.67)],
)
def test_multivariate_ewma_limits_of_run_length_200(series, weight, limit):
    """Prabhu and Runger 1997; Lowry et al. 1992. 8.64 in public text, the others by memory."""
    assert multivariate_ewma_run_length(series, weight, limit) == pytest.approx(200.0, rel=5e-3)
    solved = multivariate_ewma_limit(series, weight, 200.0)
    assert multivariate_ewma_run_length(series, weight, solved) == pytest.approx(200.0, rel=1e-9)


def test_hotelling_chart_with_known_covariance():
    """Noncentral chi-square; scipy's law is the reference of the formula."""
    limit = known_covariance_limit(2, 0.005)
    assert limit == pytest.approx(10.5966, abs=1e-4)
    found = [known_covariance_run_length(2, limit, distance) for distance in (0.0, 1.0, 2.0)]
    np.testing.assert_allclose(found, [200.0, 41.915, 6.875], atol=2e-3)


@pytest.mark.parametrize(
    ("series", "points", "false_alarm", "limits"),
    [
        (2, 25, 0.0027, (9.582324, 16.78498)),
        (3, 30, 0.01, (9.770442, 15.319316)),
        (2, 11, 0.05, (4.792084, 10.318775)),
    ],
)
def test_hotelling_limits_of_individuals(series, points, false_alarm, limits):
    """Tracy, Young and Mason 1992, formulas from memory."""
    found = (
        baseline_limit(series, points, false_alarm),
        future_limit(series, points, false_alarm),
    )
    np.testing.assert_allclose(found, limits, atol=1e-5)


def test_hotelling_statistic_exceeds_its_limits_as_often_as_stated():
    generator = np.random.default_rng(1)
    inside = outside = 0
    for _ in range(600):
        points = generator.standard_normal((12, 2)) @ np.array([[1.0, 0.4], [0.0, 0.7]])
        inside += np.sum(hotelling_statistic(points[:11], points[:11]) > 4.792084)
        outside += hotelling_statistic(points[11:], points[:11])[0] > 10.318775
    assert stats.binomtest(int(outside), 600, 0.05).pvalue > 0.01
    assert inside / 6600 == pytest.approx(0.05, abs=0.012)


@pytest.fixture(scope="module")
def nile():
    data = pytest.importorskip("statsmodels.datasets.nile")
    return data.load_pandas().data["volume"].to_numpy(dtype=float)


def test_the_nile_fell_after_1898(nile):
    """Cobb, Biometrika 65 (1978) 243-251, from memory: the change falls after 1898."""
    found = change_point(nile)
    assert 1871 + found.first - 1 == 1898
    assert (found.before, found.after) == pytest.approx((1097.75, 849.97), abs=0.01)
    assert found.chance < 1e-9
    assert {1897, 1898} <= set(1871 + found.confidence_set(0.95) - 1)


def test_the_nile_is_no_longer_autocorrelated_after_its_change(nile):
    assert lag_one_autocorrelation(nile).chance < 1e-5
    assert lag_one_autocorrelation(nile[28:]).chance > 0.01


def test_autocorrelation_is_that_of_an_independent_library(nile):
    tools = pytest.importorskip("statsmodels.tsa.stattools")
    found = lag_one_autocorrelation(nile)
    raw = (found.value - 1.0 / 100) / (1.0 + 3.0 / 100)
    assert raw == pytest.approx(tools.acf(nile, nlags=1, fft=False)[1], abs=1e-12)


def test_recursive_residuals_are_those_of_an_independent_library(nile):
    """statsmodels' recursive least squares; scores undone by the same t and normal laws."""
    regression = pytest.importorskip("statsmodels.regression.recursive_ls")
    count, first = 60, 12
    years = np.arange(count) / count
    design = np.column_stack([np.ones(count), years])
    fit = regression.RecursiveLS(nile[:count], design).fit()
    expected = fit.resid_recursive[first:]
    scores = recursive_scores(
        nile[:count],
        design,
        np.ones(count),
        np.arange(count) < first,
        np.ones(count, dtype=bool),
    )[first:]
    freedom = np.arange(first, count) - 2
    ratio = np.sign(scores) * stats.t.isf(stats.norm.sf(np.abs(scores)), freedom)
    squares = np.cumsum(fit.resid_recursive[2:] ** 2)[first - 3 : -1]
    np.testing.assert_allclose(ratio * np.sqrt(squares / freedom), expected, rtol=1e-6)


def test_run_length_of_modal_series_with_measured_correlation(small_results):
    """Simulated units with the correlation measured in a small invented campaign.

    Charts as in production: each unit judged by those before it. The stated run length is a lower
    bound (Royen 2014), so the share of histories with a false alarm must not exceed that of
    independent charts.
    """
    population = load(small_results / "population.nc")
    effects = population["effect"].values.astype(str)
    chosen = np.array([name.endswith("modal_frequency") for name in effects])
    correlation = population["unit_effect_correlation"].values[np.ix_(chosen, chosen)]
    assert np.abs(correlation - np.eye(len(correlation))).max() > 0.02
    family = ChartFamily(len(correlation), len(correlation))
    limits = family_limits(family, 60.0)
    first, units, repeats = 14, 44, 40
    generator = np.random.default_rng(11)
    root = np.linalg.cholesky(correlation)
    alarms = sum(
        _false_alarm(generator.standard_normal((units, len(root))) @ root.T, first, family, limits)
        for _ in range(repeats)
    )
    allowed = 1.0 - np.exp(-(units - first) / 60.0)
    assert stats.binomtest(alarms, repeats, allowed, alternative="greater").pvalue > 0.01
    assert alarms > 0


def _false_alarm(values, first, family, limits):
    count, series = values.shape
    baseline, everyone = np.arange(count) < first, np.ones(count, dtype=bool)
    lots = np.arange(count) // 6
    for k in range(series):
        ones = np.ones(count)
        scores = recursive_scores(values[:, k], ones[:, None], ones, baseline, everyone)
        moving = ewma(scores, family.ewma_weight) / ewma_deviation(family.ewma_weight)
        group = running_group_scores(values[:, k], ones, lots, everyone, ~baseline)
        largest = np.fmax(np.abs(scores), np.abs(group))
        if np.nanmax(largest) > limits.individuals or np.abs(moving).max() > limits.ewma:
            return True
        if np.max(cusum(scores, family.cusum_reference)) > limits.cusum:
            return True
    joint = joint_scores(values, np.ones_like(values), baseline, everyone)
    return bool(multivariate_ewma(joint, family.joint_weight).max() > limits.joint)
