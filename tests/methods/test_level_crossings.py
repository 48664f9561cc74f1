import numpy as np
import pytest

from identkit.methods.level_crossings import EvenPart, LevelTest, even_part, level_crossings
from identkit.methods.levelling import levelled_realisation, levelling
from identkit.methods.modal_model import TWO_PI
from identkit.methods.state_space import StateSpace, frequency_response
from tests.methods.families import plant


def two_outputs(error: StateSpace, bound: StateSpace) -> LevelTest:
    """Stand error and bound side by side, without shared states."""
    first, second = even_part(error), even_part(bound)
    states = error.states + bound.states
    dynamics = np.zeros((states, states))
    dynamics[: error.states, : error.states] = error.A
    dynamics[error.states :, error.states :] = bound.A
    return LevelTest(
        dynamics,
        np.concatenate([error.B[:, 0], bound.B[:, 0]]),
        EvenPart(np.concatenate([first.row, np.zeros(bound.states)]), first.constant),
        EvenPart(np.concatenate([np.zeros(error.states), second.row]), second.constant),
    )


def test_even_part_is_the_squared_magnitude() -> None:
    system = levelled_realisation(plant(), levelling(plant(), 22e3))
    part = even_part(system)
    grid = np.geomspace(50.0, 22e3, 200)
    expected = np.abs(frequency_response(system, grid)[:, 0, 0]) ** 2
    half = StateSpace(system.A, system.B, part.row[None, :], np.zeros((1, 1)))
    found = part.constant + 2.0 * frequency_response(half, grid)[:, 0, 0].real
    np.testing.assert_allclose(found, expected, rtol=1e-6)


@pytest.mark.parametrize("base", ["pivot", "free", "none"])
@pytest.mark.parametrize("level", [0.3, 1.0, 3.0])
def test_every_sign_change_of_a_dense_grid_is_found(base: str, level: float) -> None:
    rng = np.random.default_rng(4)
    factor = levelling(plant(base=base), 22e3)
    error = levelled_realisation(plant(rng, base), factor)
    bound = levelled_realisation(plant(rng, base), factor)
    found = level_crossings(two_outputs(error, bound), level, TWO_PI * 50.0, TWO_PI * 22e3)
    grid = np.geomspace(50.0, 22e3, 100001)
    ratio = np.abs(
        frequency_response(error, grid)[:, 0, 0] / frequency_response(bound, grid)[:, 0, 0]
    )
    changes = grid[np.flatnonzero(np.diff(np.sign(ratio - level)))]
    assert len(changes) > 0 or level != 1.0
    for change in changes:
        assert np.min(np.abs(found / TWO_PI / change - 1.0)) < 2e-4


def test_no_crossing_above_the_peak_and_two_just_below() -> None:
    error = levelled_realisation(plant(np.random.default_rng(2), "none", modes=1), None)
    static = StateSpace(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.eye(1))
    peak_frequency = np.linspace(1100.0, 1300.0, 200001)
    peak = np.abs(frequency_response(error, peak_frequency)[:, 0, 0]).max()
    test = two_outputs(error, static)
    assert level_crossings(test, peak * (1.0 + 1e-3), 600.0, 6e4).size == 0
    assert level_crossings(test, peak * (1.0 - 1e-3), 600.0, 6e4).size == 2
