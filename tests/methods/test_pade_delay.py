import math

import numpy as np
import pytest

from identkit.methods.pade_delay import (
    pade_error,
    pade_matrices,
    pade_order,
    pade_phase,
    pade_response,
)


@pytest.mark.parametrize("order", [1, 2, 3, 5, 8, 14])
@pytest.mark.parametrize("delay", [2e-5, 0.3, -1e-6])
def test_ladder_equals_closed_form_of_the_pade_polynomials(order: int, delay: float) -> None:
    # Coefficients (2n-k)! n! / ((2n)! k! (n-k)!) of the diagonal approximant.
    k = np.arange(order + 1)
    coefficients = np.array(
        [
            math.factorial(2 * order - j)
            * math.factorial(order)
            / (math.factorial(2 * order) * math.factorial(j) * math.factorial(order - j))
            for j in k
        ]
    )
    a, b, c, d = pade_matrices(delay, order)
    for phase in (0.1, 1.0, 2.8):
        s = 1j * phase / delay
        found = (c @ np.linalg.solve(s * np.eye(order) - a, b) + d)[0, 0]
        x = s * delay
        expected = (coefficients @ (-x) ** k) / (coefficients @ x**k)
        assert abs(found - expected) < 1e-12
        assert abs(pade_response(np.array(phase), order) - expected) < 1e-13


def test_ladder_is_stable_and_lossless() -> None:
    a, b, c, d = pade_matrices(1.0, 6)
    assert np.linalg.eigvals(a).real.max() < 0.0
    # Lossless and balanced: A + A' + C'C = 0 and B = -C' D.
    np.testing.assert_allclose(a + a.T + c.T @ c, 0.0, atol=1e-12)
    np.testing.assert_allclose(b, -c.T @ d, atol=1e-12)


def test_error_figures_and_growth() -> None:
    assert pade_error(0.14, 3) == pytest.approx(1.045e-11, rel=1e-3)
    x = np.linspace(0.01, 6.0, 600)
    lag = np.unwrap(pade_phase(x, 4))
    assert np.all(np.diff(x - lag) > -1e-12)


def test_order_is_the_lowest_that_is_good_enough() -> None:
    order = pade_order(2.8, 1e-9)
    assert pade_error(2.8, order) <= 1e-9 < pade_error(2.8, order - 1)
    assert pade_order(0.0, 1e-9) == 0


def test_long_delay_is_refused_with_its_phase() -> None:
    with pytest.raises(ValueError, match="500 rad"):
        pade_order(500.0, 1e-9)
