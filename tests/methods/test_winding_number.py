import numpy as np
import pytest

from identkit.methods.winding_number import turns_around_zero


@pytest.mark.parametrize("turns", [-3, -1, 0, 1, 2])
def test_closed_curves_turn_as_often_as_they_were_made_to(turns: int) -> None:
    angle = np.linspace(0.0, 2.0 * np.pi, 200)
    curve = np.exp(1j * turns * angle) * (1.0 + 0.4 * np.sin(3.0 * angle))
    assert turns_around_zero(curve) == turns


def test_a_curve_within_one_of_one_never_turns() -> None:
    rng = np.random.default_rng(4)
    curve = 1.0 + 0.999 * rng.random(500) * np.exp(2j * np.pi * rng.random(500))
    assert turns_around_zero(curve) == 0


def test_zeros_less_poles_in_the_right_half_plane() -> None:
    """Principle of the argument over the whole axis; s runs upwards, clockwise around it."""
    s = 1j * np.sinh(np.linspace(-12.0, 12.0, 20001))
    value = (s - 1.0) * (s - 2.0) / ((s + 1.0) * (s + 3.0)) * (s + 5.0) / (s - 5.0)
    assert turns_around_zero(value) == -(2 - 1)
