"""Statistics against published tables, worked examples and general reference libraries."""

import warnings

import numpy as np
import pytest
from scipy import stats

from identkit.methods.modal_assurance import modal_assurance
from identkit.methods.robust_distance import median_and_scale, median_slope
from identkit.methods.tolerance_limits import (
    binomial_interval,
    binomial_lower_limit,
    tolerance_content,
    tolerance_sample_size,
)
from identkit.methods.variance_components import restricted_likelihood_fit

pytestmark = pytest.mark.outside

# Snedecor and Cochran, Statistical Methods, 6th ed., 1967, p. 286: calcium in turnip greens,
# 4 plants x 3 leaves x 2 determinations, in order.
TURNIP_GREENS = np.array(
    [
        [[3.28, 3.09], [3.52, 3.48], [2.88, 2.80]],
        [[2.46, 2.44], [1.87, 1.92], [2.19, 2.19]],
        [[2.77, 2.66], [3.74, 3.44], [2.55, 2.55]],
        [[3.78, 3.87], [4.07, 4.12], [3.31, 3.31]],
    ]
)


# Davies and Goldsmith, Statistical Methods in Research and Production, 4th ed., 1972, Table 6.1:
# yield of dyestuff, 6 batches x 5 (data from memory).
DYESTUFF = np.array(
    [
        [1545, 1440, 1440, 1520, 1580],
        [1540, 1555, 1490, 1560, 1495],
        [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545],
        [1595, 1630, 1515, 1635, 1625],
        [1520, 1455, 1450, 1480, 1445],
    ],
    dtype=float,
)
# Box and Tiao, Bayesian Inference in Statistical Analysis, 1973, Table 5.1.4: generated data of
# the same shape whose variance between batches is estimated as zero (data from memory).
NO_SPREAD = np.array(
    [
        [7.298, 3.846, 2.434, 9.566, 7.990],
        [5.220, 6.556, 0.608, 11.788, -0.892],
        [0.110, 10.386, 13.434, 5.510, 8.166],
        [2.212, 4.852, 7.092, 9.288, 4.980],
        [0.282, 9.014, 4.458, 9.446, 7.198],
        [1.722, 4.782, 8.106, 0.758, 3.758],
    ]
)


@pytest.mark.parametrize(
    ("content", "confidence", "draws"),
    # Wilks 1941 and the GRS tables (Glaeser); 29, 299 and 459 are values from memory.
    [(0.9, 0.95, 29), (0.95, 0.95, 59), (0.95, 0.99, 90), (0.99, 0.95, 299), (0.99, 0.99, 459)],
)
def test_wilks_first_order_sample_sizes(content, confidence, draws):
    assert tolerance_sample_size(content, confidence) == draws


@pytest.mark.parametrize(
    ("order", "draws"), list(enumerate([59, 93, 124, 153, 181, 208], start=1))
)  # Wilks 1941, 95/95 by the k-th largest
def test_wilks_higher_orders(order, draws):
    assert tolerance_sample_size(0.95, 0.95, order) == draws
    assert tolerance_content(draws, 0.95, order) >= 0.95 > tolerance_content(draws - 1, 0.95, order)


@pytest.mark.parametrize(
    ("violation", "risk", "support", "draws"),
    # Campi and Garatti 2008 (bound); the counts are computed from the exact binomial.
    [
        (0.05, 0.05, 1, 59),
        (0.05, 0.01, 2, 130),
        (0.05, 1e-6, 5, 459),
        (0.1, 1e-6, 10, 316),
        (0.01, 1e-6, 10, 3260),
    ],
)
def test_scenario_sample_sizes(violation, risk, support, draws):
    assert tolerance_sample_size(1.0 - violation, 1.0 - risk, support) == draws


def test_clopper_pearson_of_the_nist_handbook():
    # NIST/SEMATECH e-Handbook 7.2.4.1: 4 of 20 at 90 %; its printed .401029 is 1e-6 high.
    low, high = binomial_interval(4, 20, 0.90)
    assert low == pytest.approx(0.071354, abs=1.1e-6)
    assert high == pytest.approx(0.401029, abs=1.1e-6)


@pytest.mark.parametrize(("successes", "trials"), [(0, 7), (3, 11), (24, 24), (199, 200)])
def test_binomial_limits_agree_with_scipy(successes, trials):
    reference = stats.binomtest(successes, trials).proportion_ci(0.9, method="exact")
    assert binomial_interval(successes, trials, 0.9) == pytest.approx(tuple(reference), abs=1e-10)
    one_sided = stats.binomtest(successes, trials, alternative="greater").proportion_ci(0.9)
    assert binomial_lower_limit(successes, trials, 0.9) == pytest.approx(one_sided.low, abs=1e-10)


def test_modal_assurance_by_definition():
    # Allemang and Brown 1982 (definition).
    golden = (1.0 + np.sqrt(5.0)) / 2.0
    assert modal_assurance([1.0, 1.0], [1.0, 0.0]) == pytest.approx(0.5, abs=1e-9)
    assert modal_assurance([1.0, 1.0], [1.0, -1.0]) == pytest.approx(0.0, abs=1e-9)
    assert modal_assurance([1.0, 2.0j], [1.0j, -2.0]) == pytest.approx(1.0, abs=1e-9)
    assert modal_assurance([1.0, golden], [1.0, 1.0]) == pytest.approx(0.9472135955, abs=1e-9)


def test_nested_components_of_the_turnip_greens():
    # Snedecor and Cochran 1967, p. 286: balanced restricted likelihood is the analysis of
    # variance when no component is negative. Printed: plant .365223, leaf .16106, error .006654.
    plant, leaf = np.divmod(np.arange(24) // 2, 3)
    fit = restricted_likelihood_fit(
        TURNIP_GREENS.ravel(), np.ones((24, 1)), plant, 3 * plant + leaf, np.zeros(24)
    )
    assert fit.converged
    assert fit.variance == pytest.approx([0.365223, 0.16106, 0.006654], abs=2e-6)
    between = TURNIP_GREENS.mean(axis=(1, 2))
    plant_mean_square = 6.0 * between.var(ddof=1)
    leaf_mean_square = 2.0 * TURNIP_GREENS.mean(axis=2).var(axis=1, ddof=1).mean()
    assert plant_mean_square == pytest.approx(2.520115, abs=1e-5)
    assert leaf_mean_square == pytest.approx(0.328775, abs=1e-5)
    # The mean's standard error is that of the plant means.
    assert fit.effects[0] == pytest.approx(TURNIP_GREENS.mean(), abs=1e-9)
    assert fit.effect_covariance[0, 0] == pytest.approx(plant_mean_square / 24.0, rel=1e-4)


def _one_way(table):
    batch = np.repeat(np.arange(len(table)), table.shape[1])
    size = table.size
    return restricted_likelihood_fit(
        table.ravel(), np.ones((size, 1)), batch, batch, np.zeros(size)
    )


def _criterion(fit, observations):
    return -2.0 * fit.restricted_log_likelihood + (observations - 1) * np.log(2.0 * np.pi)


def test_one_way_components_of_the_dyestuff():
    # D. Bates, M. Maechler, B. Bolker and S. Walker, "Fitting linear mixed-effects models using
    # lme4", Journal of Statistical Software 67 (2015), and the package's manual: variance 1764.05
    # and 2451.25, standard error of the mean 19.38, criterion 319.6543, predicted batch effects
    # (values from memory).
    fit = _one_way(DYESTUFF)
    assert fit.variance[[0, 2]] == pytest.approx([1764.05, 2451.25], abs=0.006)
    assert fit.effects[0] == pytest.approx(1527.5, abs=1e-9)
    assert np.sqrt(fit.effect_covariance[0, 0]) == pytest.approx(19.38, abs=0.005)
    assert _criterion(fit, 30) == pytest.approx(319.6543, abs=5e-5)
    predicted = [-17.6069, 0.3913, 28.5622, -23.0845, 56.7332, -44.9953]
    assert fit.unit_effect == pytest.approx(predicted, abs=1e-3)


def test_one_way_components_without_spread_stay_at_zero():
    # Box and Tiao 1973: the analysis of variance gives a negative component; the restricted
    # likelihood stops at zero, residual 13.81, criterion 161.8283 (values from memory).
    fit = _one_way(NO_SPREAD)
    assert fit.converged
    assert fit.variance[0] == 0.0
    assert fit.variance[2] == pytest.approx(13.81, abs=0.005)
    assert fit.effects[0] == pytest.approx(5.6656, abs=5e-5)
    assert _criterion(fit, 30) == pytest.approx(161.8283, abs=5e-5)


def test_unbalanced_nested_components_agree_with_statsmodels():
    pytest.importorskip("statsmodels")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the library's own notices are not ours to judge
        import pandas as pd
        import statsmodels.formula.api as formula

        rng = np.random.default_rng(5)
        unit, head, value = _unbalanced(rng)
        temperature = rng.choice([10.0, 25.0, 50.0], len(value))
        frame = pd.DataFrame({"y": value, "unit": unit, "head": head, "t": temperature})
        reference = formula.mixedlm(
            "y ~ t", frame, groups="unit", re_formula="1", vc_formula={"head": "0 + C(head)"}
        ).fit(reml=True)
    fixed = np.column_stack([np.ones(len(value)), temperature])
    fit = restricted_likelihood_fit(value, fixed, unit, head, np.zeros(len(value)))
    expected = [reference.cov_re.iloc[0, 0], reference.vcomp[0], reference.scale]
    assert fit.variance == pytest.approx(expected, rel=2e-3)
    assert fit.effects == pytest.approx(reference.fe_params.to_numpy(), rel=1e-3, abs=1e-5)
    errors = np.sqrt(np.diag(fit.effect_covariance))
    assert errors == pytest.approx(reference.bse_fe.to_numpy(), rel=2e-3)


def test_robust_estimates_agree_with_scipy():
    rng = np.random.default_rng(2)
    x, y = rng.normal(size=41), rng.standard_t(3, size=41)
    assert median_slope(x, y) == pytest.approx(stats.theilslopes(y, x).slope, rel=1e-12)
    reference = stats.median_abs_deviation(y, scale="normal")
    assert median_and_scale(y)[1] == pytest.approx(reference, rel=1e-9)


def _unbalanced(rng):
    unit, head, value = [], [], []
    for u in range(15):
        of_unit = 2.0 * rng.normal()
        for h in range(rng.integers(2, 5)):
            of_head = rng.normal()
            for _ in range(rng.integers(1, 5)):
                unit.append(u)
                head.append(10 * u + h)
                value.append(5.0 + of_unit + of_head + 0.5 * rng.normal())
    return np.array(unit), np.array(head), np.array(value)
