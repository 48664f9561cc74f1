from dataclasses import replace

import numpy as np
import pytest

from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.modal_transfer import modal_poles, modal_value, modal_zeros
from identkit.methods.state_space import modal_realisation
from tests.methods.families import plant


@pytest.mark.parametrize("base", ["free", "pivot", "none"])
def test_values_poles_and_zeros(base: str) -> None:
    parameters = plant(np.random.default_rng(3), base)
    grid = np.geomspace(30.0, 3e4, 50)
    expected = modal_response(grid, replace(parameters, delay=0.0))
    np.testing.assert_allclose(modal_value(2j * np.pi * grid, parameters), expected, rtol=1e-12)
    poles = modal_realisation(parameters).poles()
    poles = poles[np.abs(poles) > 1.0]
    found = modal_poles(parameters)
    assert len(found) == len(poles)
    for pole in poles:
        assert np.min(np.abs(found / pole - 1.0)) < 1e-9
    zeros = modal_zeros(parameters)
    assert len(zeros) == modal_realisation(parameters).states
    terms = np.abs(modal_value(1.01 * zeros, parameters))
    assert np.all(np.abs(modal_value(zeros, parameters)) < 1e-9 * terms)


def test_product_of_poles_and_zeros_is_the_plant() -> None:
    parameters = plant(np.random.default_rng(8))
    zeros, poles = modal_zeros(parameters), modal_poles(parameters)
    s = 2j * np.pi * np.geomspace(50.0, 22e3, 40)
    ratio = np.prod((s[:, None] - zeros) / (s[:, None] - poles), axis=1)
    expected = modal_value(s, parameters)
    np.testing.assert_allclose(parameters.feedthrough * ratio, expected, rtol=1e-8)


def test_zeros_at_infinity_are_infinite() -> None:
    parameters = replace(plant(base="none"), feedthrough=0.0)
    zeros = modal_zeros(parameters)
    assert np.sum(~np.isfinite(zeros) | (np.abs(zeros) > 1e9)) == 2


def test_overdamped_and_growing_modes() -> None:
    parameters = ModalParameters(
        np.array([10.0, 20.0]), np.array([50.0, -0.1]), np.ones(2), np.zeros(2), "none"
    )
    poles = modal_poles(parameters)
    natural = 2.0 * np.pi * np.array([10.0, 20.0])
    for k, (w, z) in enumerate(zip(natural, [50.0, -0.1], strict=True)):
        for pole in poles[k::2]:
            assert abs(pole**2 + 2.0 * z * w * pole + w**2) < 1e-10 * abs(w**2)
    assert np.sum(poles.real > 0.0) == 2
