import numpy as np
import pytest

from identkit.methods.level_crossings import LevelCrossings, SquaredGain
from identkit.methods.modal_model import TWO_PI, ModalParameters
from identkit.methods.modal_transfer import modal_poles, modal_value
from tests.methods.families import plant

LOW, HIGH = TWO_PI * 50.0, TWO_PI * 22e3


def gain_of(parameters: ModalParameters) -> SquaredGain:
    def off_axis(s: float) -> float:
        both = modal_value(np.array([s, -s]), parameters)
        return float((both[0] * both[1]).real)

    return SquaredGain(
        lambda omega: np.abs(modal_value(1j * omega, parameters)) ** 2,
        off_axis,
        modal_poles(parameters),
    )


@pytest.mark.parametrize("base", ["pivot", "none"])
@pytest.mark.parametrize("level", [0.01, 0.1, 1.0, 100.0])
def test_every_sign_change_of_a_dense_grid_is_found(base: str, level: float) -> None:
    parameters = plant(np.random.default_rng(4), base)
    found = LevelCrossings(gain_of(parameters), LOW, HIGH).at(level)
    grid = np.geomspace(LOW, HIGH, 100001)
    gain = np.abs(modal_value(1j * grid, parameters))
    places = np.flatnonzero(np.diff(np.sign(gain - level)))
    for k in places:
        assert np.any((found >= grid[k] * (1 - 1e-9)) & (found <= grid[k + 1] * (1 + 1e-9)))
    at = np.abs(modal_value(1j * found, parameters))
    # What is reported beside the sign changes may only be a near miss.
    assert np.sum(np.abs(at / level - 1.0) < 1e-6) >= len(places)


def test_some_levels_are_crossed_and_none_above_the_peak() -> None:
    parameters = plant(base="none")
    test = LevelCrossings(gain_of(parameters), LOW, HIGH)
    grid = np.geomspace(LOW, HIGH, 400001)
    peak = np.abs(modal_value(1j * grid, parameters)).max()
    assert test.at(0.99 * peak).size == 2
    assert test.at(1.01 * peak).size == 0


@pytest.mark.parametrize("height", [0.5, 0.99, 0.9999])
def test_edges_of_a_peak_seven_decades_above_its_surroundings(height: float) -> None:
    # A deep minimum of the nominal is such a peak of the ratio.
    parameters = ModalParameters(
        np.array([1000.0, 1010.0]), np.array([1e-6, 0.02]), np.array([1e4, 1e6]), np.zeros(2),
        "none",
    )  # fmt: skip
    grid = TWO_PI * np.linspace(999.99, 1000.01, 400001)
    gain = np.abs(modal_value(1j * grid, parameters))
    found = LevelCrossings(gain_of(parameters), LOW, HIGH).at(height * gain.max())
    above = grid[gain > height * gain.max()]
    step = grid[1] - grid[0]
    assert len(found) == 2
    np.testing.assert_allclose(found, [above[0] - step / 2, above[-1] + step / 2], atol=step)


def test_constant_gain_has_no_crossings() -> None:
    nothing = SquaredGain(lambda omega: np.ones(omega.shape), lambda s: 1.0, np.zeros(0))
    assert LevelCrossings(nothing, LOW, HIGH).at(2.0).size == 0


def test_the_test_checks_itself_where_it_must_cross() -> None:
    test = LevelCrossings(gain_of(plant(base="none")), LOW, HIGH)
    assert test.mismatch(0.1) < 1e-6
    assert np.isinf(test.mismatch(1e6))
