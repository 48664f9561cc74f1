import numpy as np
import pytest
from scipy.optimize import linprog, minimize, nnls

from identkit.methods.enclosing_disc import enclosing_disc


def cloud(count: int, spread: float, points: int, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=(count, points)) + 1j * rng.normal(size=(count, points))
    return (1.0 + spread * noise) * np.exp(1j * rng.uniform(0.0, 6.0, points)) * 1e-7


@pytest.mark.parametrize("count", [1, 2, 3, 5, 40, 288])
@pytest.mark.parametrize("spread", [1e-6, 0.01, 0.3, 1.0, 3.0])
def test_optimality_conditions(count: int, spread: float) -> None:
    values = cloud(count, spread, 20, count)
    disc = enclosing_disc(values)
    for column in range(values.shape[1]):
        scaled = values[:, column] / np.abs(values[:, column]).mean()
        size = np.abs(values[:, column]).mean()
        q = 0.0 if disc.saturated[column] else size / disc.centre[column]
        distance = np.abs(scaled * q - 1.0)
        assert distance.max() <= disc.radius[column] * (1.0 + 1e-9) + 1e-12
        if disc.saturated[column]:
            rows = np.vstack([scaled.real, scaled.imag, np.ones(count)])
            hull = linprog(np.zeros(count), A_eq=rows, b_eq=[0.0, 0.0, 1.0])
            assert hull.status == 0
        elif count > 1:
            # No direction improves all active ones: 0 is a convex combination of their gradients.
            active = disc.active[column][disc.active[column] >= 0]
            np.testing.assert_allclose(distance[active], distance.max(), rtol=1e-8)
            slope = scaled[active].conj() * (scaled[active] * q - 1.0)
            slope /= np.abs(slope).max()
            rows = np.vstack([slope.real, slope.imag, np.ones(len(slope))])
            assert nnls(rows, np.array([0.0, 0.0, 1.0]))[1] < 1e-8


def test_against_a_general_minimiser() -> None:
    values = cloud(30, 0.3, 5, 3) * 1e7
    disc = enclosing_disc(values)
    for column in range(5):

        def worst(x: np.ndarray, column: int = column) -> float:
            return float(np.max(np.abs(values[:, column] * (x[0] + 1j * x[1]) - 1.0)))

        start = 1.0 / values[:, column].mean()
        options = {"xatol": 1e-12, "fatol": 1e-13, "maxiter": 4000, "maxfev": 8000}
        found = minimize(worst, [start.real, start.imag], method="Nelder-Mead", options=options)
        assert disc.radius[column] <= found.fun + 1e-12
        assert disc.radius[column] == pytest.approx(found.fun, abs=1e-6)


def test_independent_of_unit_phase_and_order() -> None:
    values = cloud(20, 0.4, 50, 9)
    disc = enclosing_disc(values)
    turned = enclosing_disc(values[::-1] * 1e12j)
    np.testing.assert_allclose(turned.radius, disc.radius, rtol=1e-10)


def test_opposed_responses_saturate_and_a_single_one_costs_nothing() -> None:
    opposed = enclosing_disc(np.array([[1.0 + 0j], [-1.0], [0.1j]]))
    assert opposed.radius[0] == 1.0
    assert opposed.saturated[0]
    assert not np.isfinite(opposed.centre[0])
    single = enclosing_disc(np.array([[2.0 + 1j]]))
    assert single.radius[0] == 0.0
    assert single.centre[0] == pytest.approx(2.0 + 1j)
