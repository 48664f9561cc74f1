from dataclasses import replace

import numpy as np
import pytest

from identkit.methods.hull_vertices import hull_vertices
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.pade_delay import pade_response
from identkit.methods.tightest_nominal import _Problem, tightest_nominal
from tests.methods.families import family, plant

GRID = np.geomspace(50.0, 22e3, 400)
LEAST = 0.02


def opposed() -> list[ModalParameters]:
    """Return plants whose fifth mode has either sign, as on heads facing each other."""
    plants = family(12, 31)
    flip = np.ones(8)
    flip[4] = -1.0
    return [replace(p, residue=p.residue * flip) if k % 2 else p for k, p in enumerate(plants)]


def problem() -> tuple[np.ndarray, ModalParameters, np.ndarray]:
    values = np.array([modal_response(GRID, one) for one in opposed()])
    start = replace(plant(), residue=plant().residue * [1, 1, 1, 1, 0.01, 1, 1, 1])
    return values, start, np.abs(plant().residue)


def radius(parameters: ModalParameters, values: np.ndarray) -> np.ndarray:
    flexible = modal_response(GRID, replace(parameters, delay=0.0))
    centre = flexible * pade_response(2.0 * np.pi * GRID * parameters.delay, 3)
    return np.abs(values / centre - 1.0).max(axis=0)


def test_gradient_against_differences() -> None:
    values, start, scale = problem()
    search = _Problem(GRID, values, start, 3, scale, LEAST)
    at = 0.01 * np.random.default_rng(0).normal(size=search.size)
    _, gradient = search.smooth_cost(at, 20.0)
    for k in range(search.size):
        step = np.zeros(search.size)
        step[k] = 1e-6
        ends = [search.smooth_cost(at + sign * step, 20.0)[0] for sign in (1.0, -1.0)]
        assert gradient[k] == pytest.approx((ends[0] - ends[1]) / 2e-6, rel=1e-4, abs=1e-5)


def test_peak_and_mean_radius_fall_and_the_measure_is_what_it_says() -> None:
    values, start, scale = problem()
    found = tightest_nominal(GRID, values, start, 3, scale, LEAST)
    before, after = radius(start, values), radius(found.parameters, values)
    assert found.cost < found.start_cost
    assert after.max() < 0.6 * before.max()
    assert np.mean(np.log(after)) < np.mean(np.log(before))
    weight = np.gradient(np.log(GRID))
    level = np.log(np.maximum(after, LEAST))
    cost = weight @ (level + np.maximum(level, 0.0) ** 2) / weight.sum()
    assert found.cost == pytest.approx(cost, rel=1e-9)
    assert found.parameters.damping_ratio.min() > 0.0
    assert found.parameters.delay == start.delay


@pytest.mark.parametrize("count", [1, 2, 3, 4, 60])
def test_only_the_hull_matters(count: int) -> None:
    rng = np.random.default_rng(count)
    values = 1.0 + 0.4 * (rng.normal(size=(count, 30)) + 1j * rng.normal(size=(count, 30)))
    vertices, present = hull_vertices(values)
    assert present.any(axis=0).all()
    assert len(vertices) <= count
    for p in rng.normal(size=20) + 1j * rng.normal(size=20):
        everyone = np.abs(values / p - 1.0).max(axis=0)
        np.testing.assert_allclose(np.abs(vertices / p - 1.0).max(axis=0), everyone, rtol=1e-12)


def test_hull_of_values_on_a_line_keeps_the_ends() -> None:
    line = np.linspace(1.0, 2.0, 9)[:, None] * (1.0 + 1.0j)
    same = np.full((9, 1), 3.0 + 0.0j)
    vertices, _ = hull_vertices(np.hstack([line, same]))
    assert {1.0 + 1.0j, 2.0 + 2.0j} <= set(vertices[:, 0])
    assert set(vertices[:, 1]) == {3.0 + 0.0j}
