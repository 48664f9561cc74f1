import numpy as np
import pytest
from scipy.optimize import linprog

from identkit.methods.arnoldi_basis import arnoldi_basis
from identkit.methods.differential_correction import (
    RatioBounds,
    cancelling_factor,
    constant_ratio,
    lower_ratio,
)


def bounds_of(lower, upper=None, ceiling=None):
    count = lower.size
    return RatioBounds(
        np.cos(np.linspace(0.02, np.pi - 0.02, count)),
        lower,
        lower if upper is None else upper,
        np.full(count, np.inf) if ceiling is None else ceiling,
        np.full(count, 1.0 / count),
    )


def plain_bisection(bounds, order, levels):
    """Slow twin: bisection on the level with one linear program per step, Chebyshev basis."""
    basis = np.polynomial.chebyshev.chebvander(bounds.x, order)
    low, high = levels
    while high / low > 1.0 + 1e-5:
        level = (low * high) ** 0.5
        scale = (bounds.lower * bounds.limit(level)) ** 0.5
        rows = np.vstack(
            [
                np.hstack([-basis / scale[:, None], basis * (bounds.lower / scale)[:, None]]),
                np.hstack(
                    [basis / scale[:, None], -basis * (bounds.limit(level) / scale)[:, None]]
                ),
                np.hstack([0.0 * basis, -basis]),
            ]
        )
        needed = np.concatenate([np.zeros(2 * basis.shape[0]), -np.ones(basis.shape[0])])
        solved = linprog(np.zeros(rows.shape[1]), rows, needed, bounds=(None, None))
        low, high = (low, level) if solved.status == 0 else (level, high)
    return high


@pytest.mark.parametrize("order", [1, 2, 3, 4])
@pytest.mark.parametrize("seed", range(4))
def test_level_agrees_with_plain_bisection(order, seed):
    rng = np.random.default_rng(seed)
    theta = np.linspace(0.0, np.pi, 120)
    lower = np.exp(sum(rng.standard_normal() * np.cos(k * theta) / k for k in range(1, 7)))
    bounds = bounds_of(lower)
    start = constant_ratio(bounds)
    found = lower_ratio(
        bounds, order, (start.numerator, start.denominator), tolerance=1e-4, initial=start
    )
    assert found.settled
    assert found.best.level <= found.floor * (1.0 + 1e-4) + 1e-12
    slow = plain_bisection(bounds, order, (1.0, start.level))
    assert found.best.level == pytest.approx(slow, rel=3e-4)
    assert found.floor <= slow * (1.0 + 1e-5)


def test_pair_keeps_the_bounds_and_its_own_coefficients():
    theta = np.linspace(0.0, np.pi, 120)
    bounds = bounds_of(np.exp(np.cos(3.0 * theta)))
    start = constant_ratio(bounds)
    pair = lower_ratio(bounds, 3, (start.numerator, start.denominator), tolerance=1e-3).best
    ratio = pair.numerator / pair.denominator
    assert np.all(ratio >= bounds.lower * (1.0 - 1e-12))
    assert np.all(ratio <= pair.level * bounds.upper * (1.0 + 1e-12))
    values = [
        basis.evaluate(bounds.x) @ part
        for basis, part in zip(pair.bases, pair.coefficients, strict=True)
    ]
    np.testing.assert_allclose(values[0] / values[1], ratio, rtol=1e-9)


def test_impossible_ceiling_is_proven_and_the_point_named():
    lower = np.linspace(1.0, 2.0, 50)
    ceiling = np.full(50, np.inf)
    ceiling[:5] = 1.2
    bounds = bounds_of(lower, upper=np.where(np.isfinite(ceiling), ceiling, 1e6))
    start = constant_ratio(bounds)
    found = lower_ratio(bounds, 1, (start.numerator, start.denominator), tolerance=1e-4)
    assert found.best.level < 1.0
    lower[2] = 1.5  # a hump under a flat ceiling that a first-order ratio cannot follow
    ceiling = 1.02 * lower
    bounds = bounds_of(lower, upper=ceiling)
    found = lower_ratio(
        bounds, 1, (start.numerator, start.denominator), tolerance=1e-4, stop_level=1.0
    )
    assert found.floor > 1.0
    assert 0 <= found.deciding < 50


def test_search_stops_after_its_programs():
    theta = np.linspace(0.0, np.pi, 120)
    bounds = bounds_of(np.exp(np.cos(5.0 * theta)))
    start = constant_ratio(bounds)
    found = lower_ratio(
        bounds, 4, (start.numerator, start.denominator), tolerance=1e-6, most_programs=2
    )
    assert not found.settled


def test_common_dip_is_found_and_single_ones_are_not():
    x = np.linspace(-1.0, 1.0, 2001)
    measure = np.full(2001, 1.0 / 2001)
    basis, values = arnoldi_basis(x, np.ones(2001), measure, 2)
    near, far = (values.T @ (measure * ((x - a) ** 2 + 1e-6)) for a in (0.3, -0.4))
    common = cancelling_factor(x, (basis, basis), (near, near))
    assert common[np.argmin(np.abs(x - 0.3))] < 1e-4
    assert common[0] > 0.5
    np.testing.assert_array_equal(cancelling_factor(x, (basis, basis), (near, far)), 1.0)
