import numpy as np
import pytest
from scipy.signal import cont2discrete

from identkit.methods.held_modal_model import held_response, split_delay
from identkit.methods.image_removal import remove_images
from identkit.methods.modal_model import ModalParameters, modal_response

PERIOD = 1 / 50_400


def plant(base="pivot", delay=1.1e-5, feedthrough=-0.02, rate=0.0):
    return ModalParameters(
        np.array([3000.0, 9000.0, 18000.0]),
        np.array([0.02, 0.015, 0.02]),
        np.array([-1e8, 4e8, 1.5e9]),
        np.array([rate, 0.0, -rate]),
        base,
        base_gain=2e9,
        base_frequency=70.0,
        base_damping_ratio=0.4,
        base_residue=2.6e9,
        feedthrough=feedthrough,
        delay=delay,
    )


def by_images(frequency, parameters, images=4000):
    """Sum of the plant's images behind the hold; converges where there is no feedthrough."""
    total = np.zeros(frequency.size, dtype=complex)
    for k in range(-images, images + 1):
        shifted = frequency + k / PERIOD
        value = modal_response(np.abs(shifted), parameters)
        value = np.where(shifted < 0, value.conj(), value)
        hold = np.sinc(shifted * PERIOD) * np.exp(-1j * np.pi * shifted * PERIOD)
        total += hold * value
    return total


@pytest.mark.parametrize("base", ["free", "pivot", "none"])
@pytest.mark.parametrize("delay", [0.0, 1.1e-5, 5e-5])
def test_it_is_the_sum_of_all_images(base, delay):
    frequency = np.array([60.0, 2990.0, 9000.0, 17000.0, 24000.0])
    model = plant(base, delay, feedthrough=0.0)
    np.testing.assert_allclose(
        held_response(frequency, model, PERIOD), by_images(frequency, model), rtol=3e-6
    )


def test_feedthrough_is_delayed_to_the_next_sample():
    none = ModalParameters(*[np.zeros(0)] * 4, "none", feedthrough=2.0)
    frequency = np.array([1000.0])
    z = np.exp(2j * np.pi * frequency * PERIOD)
    np.testing.assert_allclose(held_response(frequency, none, PERIOD), 2.0)
    late = ModalParameters(*[np.zeros(0)] * 4, "none", feedthrough=2.0, delay=1.5 * PERIOD)
    np.testing.assert_allclose(held_response(frequency, late, PERIOD), 2.0 / z**2)


def test_rates_agree_with_scipy():
    """scipy.signal.cont2discrete as independent realisation."""
    w, zeta, r, q = 2 * np.pi * 5000.0, 0.03, 1e8, 3e3
    system = cont2discrete(([q, r], [1.0, 2 * zeta * w, w * w]), PERIOD)
    z = np.exp(2j * np.pi * np.array([100.0, 5000.0, 20000.0]) * PERIOD)
    expected = np.polyval(system[0][0], z) / np.polyval(system[1], z)
    one = ModalParameters(*(np.array([v]) for v in (5000.0, zeta, r, q)), "none")
    found = held_response(np.array([100.0, 5000.0, 20000.0]), one, PERIOD)
    np.testing.assert_allclose(found, expected, rtol=1e-9)


def test_delays_are_split():
    assert split_delay(3.0, 1.0) == (3, 0.0)
    assert split_delay(2.25, 1.0) == (2, 0.25)
    assert split_delay(3.0 * 0.1, 0.1) == (3, 0.0)
    assert split_delay(-0.25, 1.0) == (-1, 0.75)


@pytest.mark.parametrize("noise", [1e-3, 2e-2])
def test_images_are_removed_to_below_the_noise(noise):
    generator = np.random.default_rng(1)
    frequency = np.geomspace(60.0, 23_000.0, 500)
    exact = held_response(frequency, plant(), PERIOD)
    variance = (noise * np.abs(exact)) ** 2
    parts = generator.standard_normal((2, frequency.size)) * np.sqrt(variance / 2)
    found = remove_images(frequency, exact + parts[0] + 1j * parts[1], variance, PERIOD)
    truth = modal_response(frequency, plant())
    scatter = variance / np.abs(np.sinc(frequency * PERIOD)) ** 2
    error = np.abs(found.response - truth) ** 2 / scatter
    assert np.mean(error) == pytest.approx(1.0, abs=0.15)
    assert np.all(found.last_change <= 0.11 * np.sqrt(scatter))
    assert found.noise_ratio == pytest.approx(1.0, abs=0.15)
