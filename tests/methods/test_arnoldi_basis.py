import numpy as np
import pytest

from identkit.methods.arnoldi_basis import arnoldi_basis


@pytest.mark.parametrize("degree", [1, 6, 20])
def test_basis_is_orthonormal_under_the_measure(degree):
    x = np.cos(2.0 * np.arctan(np.geomspace(1e-3, 1e3, 800)))
    rng = np.random.default_rng(degree)
    measure = rng.uniform(0.5, 1.5, 800) / 800.0
    first = 10.0 ** rng.uniform(-2.0, 2.0, 800)
    _, values = arnoldi_basis(x, first, measure, degree)
    gram = values.T @ (measure[:, None] * values)
    np.testing.assert_allclose(gram, np.eye(degree + 1), atol=1e-12)


def test_recurrence_evaluates_the_same_polynomials_elsewhere():
    x = np.linspace(-1.0, 1.0, 200)
    basis, values = arnoldi_basis(x, np.exp(x), np.full(200, 0.005), 8)
    np.testing.assert_allclose(basis.evaluate(x) * np.exp(x)[:, None], values, atol=1e-10)
    y = np.linspace(-0.95, 0.93, 50)
    fitted = np.polynomial.chebyshev.chebfit(x, basis.evaluate(x), 8)
    np.testing.assert_allclose(
        basis.evaluate(y), np.polynomial.chebyshev.chebval(y, fitted).T, atol=1e-9
    )


def test_roots_are_those_of_the_polynomial():
    x = np.linspace(-1.0, 1.0, 300)
    expected = np.array([-0.9, -0.2, 0.3 + 0.4j, 0.3 - 0.4j, 1.7])
    wanted = np.prod([x - r for r in expected], axis=0).real
    basis, values = arnoldi_basis(x, np.ones(300), np.full(300, 1.0 / 300.0), 5)
    found = basis.roots(values.T @ wanted / 300.0)
    assert all(np.abs(found - r).min() < 1e-10 for r in expected)


def test_vanishing_leading_coefficient_lowers_the_degree():
    x = np.linspace(-1.0, 1.0, 300)
    basis, values = arnoldi_basis(x, np.ones(300), np.full(300, 1.0 / 300.0), 5)
    coefficients = np.zeros(6)
    coefficients[:2] = values[:, :2].T @ (x - 0.25) / 300.0
    np.testing.assert_allclose(basis.roots(coefficients), [0.25], atol=1e-10)
