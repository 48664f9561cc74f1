"""Long delays are found before the fit, short ones left to it, none comes out negative."""

import numpy as np
import pytest

from identkit.methods.long_delay import long_delay
from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_model import ModalParameters, modal_response

TOP = 12e3
FREQUENCY = np.linspace(100.0, TOP, 240)


def plant(delay):
    return ModalParameters(
        modal_frequency=np.array([2400.0, 5200.0, 8700.0]),
        damping_ratio=np.array([0.08, 0.05, 0.06]),
        residue=np.array([1.0, -4.0, 9.0]) * 1e8,
        residue_rate=np.zeros(3),
        base="none",
        feedthrough=0.4,
        delay=delay,
    )


def measured(delay, noise=0.02, seed=5):
    truth = modal_response(FREQUENCY, plant(delay))
    generator = np.random.default_rng(seed)
    error = generator.standard_normal((2, truth.size)) * noise / np.sqrt(2.0)
    variance = (noise * np.abs(truth)) ** 2
    return truth * (1.0 + error[0] + 1j * error[1]), variance


@pytest.mark.parametrize("radians", [40.0, 90.0, 150.0])
def test_a_long_delay_is_left_with_a_positive_rest(radians):
    delay = radians / (2 * np.pi * TOP)
    response, _ = measured(delay)
    rest = (delay - long_delay(FREQUENCY, response)) * 2 * np.pi * TOP
    assert 0.0 < rest < 40.0


@pytest.mark.parametrize("radians", [0.0, 1.5, 10.0])
def test_a_short_delay_is_left_alone(radians):
    response, _ = measured(radians / (2 * np.pi * TOP))
    assert long_delay(FREQUENCY, response) == 0.0


@pytest.mark.parametrize("radians", [2.0, 60.0, 120.0])
def test_the_fit_finds_a_delay_of_any_length(radians):
    delay = radians / (2 * np.pi * TOP)
    response, variance = measured(delay)
    fit = fit_modal_model(FREQUENCY, response, variance, base="none")
    error = np.sqrt(fit.covariance[0, 0])
    assert fit.parameter_names[0] == "delay"
    assert abs(fit.parameters.delay - delay) < 5.0 * error
    assert fit.parameters.modal_frequency.size == 3


def test_a_plant_without_delay_is_not_given_a_negative_one():
    for seed in range(12):
        response, variance = measured(0.0, seed=seed)
        fit = fit_modal_model(FREQUENCY, response, variance, base="none")
        assert fit.parameters.delay >= 0.0
        assert fit.parameters.modal_frequency.size == 3
