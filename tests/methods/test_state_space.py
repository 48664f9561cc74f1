from dataclasses import replace

import numpy as np
import pytest

from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.pade_delay import pade_response
from identkit.methods.state_space import (
    StateSpace,
    frequency_response,
    inverse,
    modal_realisation,
    negative,
    parallel,
    series,
)
from tests.methods.families import plant

GRID = np.geomspace(30.0, 25e3, 3000)


def dense_response(system: StateSpace, frequency: np.ndarray) -> np.ndarray:
    eye = np.eye(system.states)
    return np.array(
        [
            system.C @ np.linalg.solve(2j * np.pi * f * eye - system.A, system.B) + system.D
            for f in frequency
        ]
    )


@pytest.mark.parametrize("base", ["free", "pivot", "none"])
def test_realisation_has_the_modal_response_behind_its_delay(base: str) -> None:
    parameters = plant(np.random.default_rng(1), base)
    expected = modal_response(GRID, replace(parameters, delay=0.0))
    found = frequency_response(modal_realisation(parameters), GRID)[:, 0, 0]
    np.testing.assert_allclose(found, expected, rtol=1e-9)
    delayed = frequency_response(modal_realisation(parameters, 3), GRID)[:, 0, 0]
    phase = 2.0 * np.pi * GRID * parameters.delay
    np.testing.assert_allclose(delayed, expected * pade_response(phase, 3), rtol=1e-8)


def test_realisation_is_well_scaled() -> None:
    system = modal_realisation(plant(), 3)
    gains = np.linalg.norm(system.B[:18, 0].reshape(9, 2), axis=1)
    seen = np.linalg.norm(system.C[0, :18].reshape(9, 2), axis=1)
    np.testing.assert_allclose(gains, seen, rtol=1e-12)
    assert max(gains.max() / gains.min(), np.abs(system.A).max() / 2e6) < 100.0


def test_residue_rate_and_overdamped_modes_are_realised() -> None:
    parameters = ModalParameters(
        np.array([100.0, 300.0]), np.array([1.0, 2.5]), np.array([1e5, 0.0]),
        np.array([3.0, -40.0]), "none", feedthrough=0.2,
    )  # fmt: skip
    found = frequency_response(modal_realisation(parameters), GRID)[:, 0, 0]
    np.testing.assert_allclose(found, modal_response(GRID, parameters), rtol=1e-11)


def test_interconnections_agree_with_pointwise_algebra() -> None:
    rng = np.random.default_rng(5)

    def system(states: int) -> StateSpace:
        a = rng.normal(size=(states, states)) * 1e3
        return StateSpace(
            a, rng.normal(size=(states, 2)), rng.normal(size=(2, states)) * 1e3,
            rng.normal(size=(2, 2)),
        )  # fmt: skip

    first, second = system(3), system(4)
    one, two = (dense_response(item, GRID[::300]) for item in (first, second))
    for joined, expected in (
        (series(first, second), two @ one),
        (parallel([first, second]), one + two),
        (negative(first), -one),
        (inverse(first), np.linalg.inv(one)),
    ):
        np.testing.assert_allclose(frequency_response(joined, GRID[::300]), expected, rtol=1e-8)


def test_response_of_defective_dynamics() -> None:
    chain = StateSpace(
        np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [0.0, 0.0, 0.0]]),
        np.array([[0.0], [0.0], [1.0]]), np.array([[1.0, 0.0, 0.0]]), np.zeros((1, 1)),
    )  # fmt: skip
    found = frequency_response(chain, np.array([0.5, 2.0]))[:, 0, 0]
    np.testing.assert_allclose(found, 1.0 / (2j * np.pi * np.array([0.5, 2.0])) ** 3, rtol=1e-14)


def test_unstable_poles_are_counted_and_integrators_are_not() -> None:
    assert modal_realisation(plant(base="free"), 2).unstable_poles() == 0
    growing = replace(plant(), damping_ratio=np.array([-0.01] + [0.01] * 7))
    assert modal_realisation(growing).unstable_poles() == 2
    static = StateSpace(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.eye(1))
    assert static.unstable_poles() == 0
    np.testing.assert_array_equal(frequency_response(static, GRID[:2]), np.ones((2, 1, 1)))
