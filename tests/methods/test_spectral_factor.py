import numpy as np
import pytest

from identkit.methods.arnoldi_basis import arnoldi_basis
from identkit.methods.damping_rows import warped
from identkit.methods.spectral_factor import (
    WarpedPolynomial,
    damping_ratios,
    factor_magnitude,
    left_half_plane,
    squared_roots,
)


def random_roots(rng, order, decades, centre):
    pairs, odd = divmod(order, 2)
    size = centre * 10.0 ** rng.uniform(-decades / 2.0, decades / 2.0, pairs + odd)
    damping = 10.0 ** rng.uniform(-2.3, -0.05, pairs)
    upper = size[:pairs] * (-damping + 1j * np.sqrt(1.0 - damping**2))
    return np.concatenate([upper, upper.conj(), -size[pairs:] + 0.0j])


def polynomial_of(roots, omega, centre):
    """Values prod (u - v) / (1 + u) at the points, and coefficients in an Arnoldi basis of them."""
    u = (omega / centre) ** 2
    values = np.ones(omega.size)
    for root in roots:
        values = values * np.abs(1j * omega - root) ** 2 / (centre**2 * (1.0 + u))
    measure = np.full(omega.size, 1.0 / omega.size)
    basis, columns = arnoldi_basis(warped(omega, centre), 1.0 / values, measure, roots.size)
    return WarpedPolynomial(basis, (measure * 1.0) @ columns, u, values)


@pytest.mark.parametrize("order", [1, 2, 5, 9, 16])
@pytest.mark.parametrize("decades", [1.0, 4.5])
def test_squared_magnitude_is_matched(order, decades):
    rng = np.random.default_rng(order)
    centre = 2.0 * np.pi * 300.0
    omega = centre * np.geomspace(10.0 ** (-decades / 2.0), 10.0 ** (decades / 2.0), 1500)
    roots = random_roots(rng, order, decades, centre)
    polynomial = polynomial_of(roots, omega, centre)
    found = left_half_plane(squared_roots(polynomial), centre)
    assert found.size == order
    assert np.all(found.real < 0.0)
    reference = np.full(order, -centre, dtype=complex)
    squared = factor_magnitude(omega, reference, found, 1.0) ** 2
    ratio_db = 10.0 * np.log10(squared / polynomial.values)
    assert np.ptp(ratio_db) < 1e-8
    for root in roots:
        assert np.abs(found - root).min() < 1e-7 * abs(root)


def test_double_root_on_the_axis_becomes_a_pair():
    squared = np.array([4.0 + 0.0j, 4.0 + 0.0j, -1.0 + 0.0j])
    roots = left_half_plane(squared, 10.0)
    np.testing.assert_allclose(sorted(roots.imag), [-20.0, 0.0, 20.0])
    assert damping_ratios(roots).min() == 0.0


def test_magnitude_of_many_far_apart_roots_does_not_overflow():
    poles = -(10.0 ** np.arange(-20.0, 20.0)) + 0.0j
    magnitude = factor_magnitude(np.array([0.0, 1.0, 1e300, np.inf]), poles, 2.0 * poles, 3.0)
    assert np.all(np.isfinite(magnitude))
    assert magnitude[-1] == 3.0
    assert magnitude[0] == pytest.approx(3.0 * 2.0**40)


def test_constant_has_no_roots():
    measure = np.full(5, 0.2)
    basis, columns = arnoldi_basis(np.linspace(-1.0, 1.0, 5), np.ones(5), measure, 0)
    polynomial = WarpedPolynomial(basis, measure @ columns, np.ones(5), np.ones(5))
    assert squared_roots(polynomial).size == 0
