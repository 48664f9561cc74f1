"""Modal model: its derivatives against differences, its limits against closed forms."""

import numpy as np
import pytest

from identkit.methods.modal_model import (
    ModalParameters,
    modal_derivatives,
    modal_response,
    parameter_names,
)
from tests.methods.invented_plants import Kind, draw, plant


def as_vector(plant, general):
    modes = np.column_stack(
        [plant.modal_frequency, plant.damping_ratio, plant.residue]
        + ([plant.residue_rate] if general else [])
    )
    base = {
        "free": [plant.base_gain],
        "pivot": [plant.base_frequency, plant.base_damping_ratio, plant.base_residue],
        "none": [],
    }[plant.base]
    return np.concatenate([[plant.delay, plant.feedthrough], base, modes.ravel()])


def as_plant(vector, base, general):
    first = {"free": 3, "pivot": 5, "none": 2}[base]
    modes = vector[first:].reshape(-1, 4 if general else 3)
    pivot = vector[2:5] if base == "pivot" else np.zeros(3)
    return ModalParameters(
        modes[:, 0], modes[:, 1], modes[:, 2],
        modes[:, 3] if general else np.zeros(len(modes)), base,
        base_gain=vector[2] if base == "free" else 0.0,
        base_frequency=pivot[0], base_damping_ratio=pivot[1], base_residue=pivot[2],
        feedthrough=vector[1], delay=vector[0],
    )  # fmt: skip


@pytest.mark.parametrize("general", [False, True])
@pytest.mark.parametrize("base", ["free", "pivot", "none"])
def test_derivatives_agree_with_differences(base, general):
    drawn = draw(np.random.default_rng(3), base=base, general=general, modes=3, points=200)
    exact = modal_derivatives(drawn.frequency, drawn.truth, general=general)
    vector = as_vector(drawn.truth, general)
    assert exact.shape == (200, len(parameter_names(base, 3, general=general)))
    for k, value in enumerate(vector):
        step = 1e-6 * abs(value)
        up, down = vector.copy(), vector.copy()
        up[k], down[k] = value + step, value - step
        change = modal_response(drawn.frequency, as_plant(up, base, general))
        change = change - modal_response(drawn.frequency, as_plant(down, base, general))
        rounding = 1e-15 * np.max(np.abs(drawn.response)) / step
        atol = 2e-7 * np.max(np.abs(exact[:, k])) + rounding
        np.testing.assert_allclose(exact[:, k], change / (2 * step), rtol=1e-6, atol=atol)


def test_names_follow_the_order_of_derivatives():
    assert parameter_names("pivot", 1, general=True) == (
        "delay", "feedthrough", "base_frequency", "base_damping_ratio", "base_residue",
        "modal_frequency_1", "damping_ratio_1", "residue_1", "residue_rate_1",
    )  # fmt: skip
    assert parameter_names("free", 1, general=False)[2] == "base_gain"


def test_static_deflection_and_high_frequency_limit():
    one = ModalParameters(
        np.array([100.0]), np.array([0.02]), np.array([5.0]), np.zeros(1), "none", feedthrough=0.25
    )
    low, high = modal_response(np.array([1e-6, 1e9]), one)
    assert low == pytest.approx(5.0 / (2 * np.pi * 100.0) ** 2 + 0.25)
    assert high == pytest.approx(0.25)


def test_delay_turns_and_keeps_size():
    kind = Kind(modes=2)
    truth = plant(np.random.default_rng(1), kind)
    frequency = np.geomspace(60.0, 2e4, 50)
    plain = ModalParameters(**{**truth.__dict__, "delay": 0.0})
    ratio = modal_response(frequency, truth) / modal_response(frequency, plain)
    np.testing.assert_allclose(ratio, np.exp(-2j * np.pi * frequency * truth.delay), atol=1e-12)
