"""Variance components: against a slow readable twin, on designs that cannot tell, at scale."""

import numpy as np
import pytest
from scipy.optimize import minimize

from identkit.methods.variance_components import (
    estimable_components,
    restricted_likelihood_fit,
)


def campaign(rng, units=12, heads=3, repeats=2, deviation=(1.0, 0.5, 0.2), error=0.1):
    """Return value, regressors, unit, head and known variance of an invented nested campaign."""
    unit = np.repeat(np.arange(units), heads * repeats)
    head = np.repeat(np.arange(units * heads), repeats)
    size = len(unit)
    known = (error * rng.uniform(0.5, 1.5, size)) ** 2
    value = (
        deviation[0] * rng.normal(size=units)[unit]
        + deviation[1] * rng.normal(size=units * heads)[head]
        + deviation[2] * rng.normal(size=size)
        + np.sqrt(known) * rng.normal(size=size)
    )
    trend = rng.uniform(-1.0, 1.0, size)
    fixed = np.column_stack([np.ones(size), trend])
    return value + fixed @ [3.0, 0.7], fixed, unit, head, known


def dense_deviance(variance, value, fixed, unit, head, known):
    """Return minus twice the restricted log likelihood, term by term with full matrices."""
    same_unit = (unit[:, None] == unit[None, :]).astype(float)
    same_head = (head[:, None] == head[None, :]).astype(float)
    covariance = variance[0] * same_unit + variance[1] * same_head
    covariance += np.diag(variance[2] + known)
    inverse = np.linalg.inv(covariance)
    information = fixed.T @ inverse @ fixed
    effects = np.linalg.solve(information, fixed.T @ inverse @ value)
    residual = value - fixed @ effects
    return (
        np.linalg.slogdet(covariance)[1]
        + np.linalg.slogdet(information)[1]
        + residual @ inverse @ residual
    )


@pytest.mark.parametrize("seed", range(4))
def test_agrees_with_the_dense_likelihood(seed):
    rng = np.random.default_rng(seed)
    data = campaign(rng)
    keep = rng.uniform(size=len(data[0])) > 0.2  # unbalanced
    data = tuple(part[keep] for part in data)
    fit = restricted_likelihood_fit(*data)
    assert fit.converged
    twin = minimize(
        lambda log_variance: dense_deviance(np.exp(log_variance), *data),
        np.log(np.maximum(fit.variance, 1e-3)) + 0.3,
        method="Nelder-Mead",
        options={"xatol": 1e-7, "fatol": 1e-10, "maxiter": 4000},
    )
    assert -2.0 * fit.restricted_log_likelihood <= twin.fun + 1e-7
    assert fit.variance == pytest.approx(np.exp(twin.x), rel=1e-3, abs=1e-5)


def test_order_of_observations_does_not_matter():
    rng = np.random.default_rng(3)
    data = campaign(rng)
    shuffle = rng.permutation(len(data[0]))
    one = restricted_likelihood_fit(*data)
    other = restricted_likelihood_fit(*(part[shuffle] for part in data))
    assert other.variance == pytest.approx(one.variance, rel=1e-6)
    assert other.unit_effect == pytest.approx(one.unit_effect, rel=1e-6, abs=1e-9)


@pytest.mark.parametrize("factor", [1e-6, 1e5])
def test_the_unit_of_the_value_does_not_matter(factor):
    value, fixed, unit, head, known = campaign(np.random.default_rng(4))
    one = restricted_likelihood_fit(value, fixed, unit, head, known)
    other = restricted_likelihood_fit(factor * value, fixed, unit, head, factor**2 * known)
    assert other.variance == pytest.approx(factor**2 * one.variance, rel=1e-4)
    assert other.effects == pytest.approx(factor * one.effects, rel=1e-6)


def test_fit_errors_are_not_counted_as_spread():
    rng = np.random.default_rng(6)
    value, fixed, unit, head, known = campaign(rng, units=60, deviation=(0.0, 0.0, 0.0), error=1.0)
    fit = restricted_likelihood_fit(value, fixed, unit, head, known)
    assert fit.variance.sum() < 0.1
    blind = restricted_likelihood_fit(value, fixed, unit, head, np.zeros_like(known))
    assert blind.variance.sum() == pytest.approx(known.mean(), rel=0.2)


def test_predicted_unit_effects_are_the_textbook_shrinkage():
    # One way, balanced: mean deviation times n s_u / (n s_u + s_e) (Henderson 1975).
    rng = np.random.default_rng(8)
    unit = np.repeat(np.arange(20), 5)
    value = rng.normal(size=20)[unit] + 0.5 * rng.normal(size=100)
    fit = restricted_likelihood_fit(value, np.ones((100, 1)), unit, unit, np.zeros(100))
    means = value.reshape(20, 5).mean(axis=1) - value.mean()
    shrink = 5.0 * fit.variance[0] / (5.0 * fit.variance[0] + fit.variance[2])
    assert fit.unit_effect == pytest.approx(shrink * means, abs=1e-6)
    # and, balanced, the variance of its estimate is known: 2 (ms_u^2/19 + ms_e^2/80) / 25
    between, within = 5.0 * means.var(ddof=1), fit.variance[2]
    error = np.sqrt(2.0 * (between**2 / 19 + within**2 / 80)) / 5.0
    assert fit.variance_standard_error[0] == pytest.approx(error, rel=0.02)


@pytest.mark.parametrize(
    ("unit", "head", "expected"),
    [
        ([0, 0, 1, 1], [0, 1, 2, 3], (True, True, False)),
        ([0, 1, 2, 3], [0, 1, 2, 3], (True, False, False)),
        ([0, 0, 1, 1], [0, 0, 1, 1], (True, False, True)),
        ([0, 0, 0, 0], [0, 0, 1, 1], (False, False, True)),
        ([0, 0, 0, 1, 1], [0, 0, 1, 2, 3], (True, True, True)),
    ],
)
def test_only_what_the_labels_can_tell_is_estimated(unit, head, expected):
    unit, head = np.array(unit), np.array(head)
    assert estimable_components(unit, head) == expected
    value = np.random.default_rng(0).normal(size=len(unit))
    fit = restricted_likelihood_fit(
        value, np.ones((len(unit), 1)), unit, head, np.full(len(unit), 1e-4)
    )
    assert np.array_equal(np.isfinite(fit.variance), expected)


def test_values_without_any_spread_are_survived():
    unit = np.repeat(np.arange(4), 3)
    fit = restricted_likelihood_fit(np.full(12, 7.0), np.ones((12, 1)), unit, unit, np.zeros(12))
    assert fit.effects[0] == pytest.approx(7.0)
    assert np.nansum(fit.variance) < 1e-12


def test_impossible_designs_are_refused():
    two = np.arange(2)
    with pytest.raises(ValueError, match="2 observations for 2 fixed effects"):
        restricted_likelihood_fit(np.ones(2), np.eye(2), two, two, np.ones(2))
    with pytest.raises(ValueError, match="not independent"):
        restricted_likelihood_fit(
            np.ones(4), np.ones((4, 2)), np.arange(4), np.arange(4), np.ones(4)
        )


@pytest.mark.slow
def test_intervals_cover_and_deviations_are_unbiased():
    rng = np.random.default_rng(11)
    deviations, inside = [], []
    for _ in range(300):
        value, fixed, unit, head, known = campaign(rng, units=24, heads=4, repeats=3)
        fit = restricted_likelihood_fit(value, fixed, unit, head, known)
        deviations.append(fit.variance)
        error = np.sqrt(np.diag(fit.effect_covariance))
        inside.append(np.abs(fit.effects - [3.0, 0.7]) < 1.96 * error)
    # 300 draws: variances known to 1.7 %, 0.9 %, 0.7 % (one sigma); three sigma allowed.
    assert np.mean(deviations, axis=0) == pytest.approx([1.0, 0.25, 0.04], rel=0.06)
    # binomial: 95 % +- 3 x 1.26 %, less the small-sample loss of 24 units for the mean
    share = np.mean(inside, axis=0)
    assert 0.90 < share[0] < 0.985
    assert 0.91 < share[1] < 0.985
