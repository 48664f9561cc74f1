import numpy as np
import pytest
from scipy.signal import lfilter

from identkit.methods.local_polynomial import local_polynomial_response
from identkit.methods.multisine_average import (
    excited_lines,
    periodic_lines,
    periodic_response,
)
from identkit.methods.periodicity import excitation_period, settled_period
from identkit.methods.schroeder_multisine import multisine
from identkit.methods.stepped_sine import dwells, sine_phasors

PERIOD = 2e-5


def loop(r, v):
    """u = r - 0.4 y(t-1), y = u + 0.9 y(t-1) of the plant, plus v."""
    driven = r.copy()
    driven[1:] -= 0.4 * v[:-1]
    u = lfilter([1.0, -0.9], [1.0, -0.5], driven)
    return u, lfilter([1.0], [1.0, -0.9], u) + v


def plant(frequency):
    return 1.0 / (1.0 - 0.9 * np.exp(-2j * np.pi * frequency * PERIOD))


def experiment(generator, noise, periods, samples=2048):
    one = multisine(np.arange(3, 100), np.ones(97), samples)
    r = np.tile(one, periods + 1)
    u, y = loop(r, noise * generator.standard_normal(r.size))
    kept = np.stack([r, u, y])[:, samples:].reshape(3, periods, samples)
    spectra = np.fft.rfft(kept, axis=-1) / samples
    chosen = excited_lines(spectra[0])
    return periodic_lines(spectra[..., chosen], chosen / (samples * PERIOD))


def test_excited_lines_are_the_lines_of_the_multisine():
    generator = np.random.default_rng(1)
    lines = experiment(generator, 0.1, 3).frequency * 2048 * PERIOD
    np.testing.assert_allclose(lines, np.arange(3, 100))


def test_response_and_variance_in_closed_loop():
    """Without bias, with circular errors, and with the stated variance."""
    generator = np.random.default_rng(2)
    scaled, square = [], []
    for _ in range(120):
        found = periodic_response([experiment(generator, 1.0, 9)], [0], [1], [2])
        error = found.response[:, 0, 0] - plant(found.frequency)
        scaled.append([np.abs(error) ** 2, found.variance[:, 0, 0]])
        square.append(error**2 / found.variance[:, 0, 0])
    scaled = np.array(scaled)
    assert scaled[:, 0].mean() / scaled[:, 1].mean() == pytest.approx(1.0, abs=0.03)
    assert abs(np.mean(square)) < 0.03


def test_several_experiments_pool_their_periods():
    generator = np.random.default_rng(3)
    both = [experiment(generator, 1.0, 4), experiment(generator, 1.0, 6)]
    found = periodic_response(both, [0], [1], [2])
    alone = periodic_response(both[:1], [0], [1], [2])
    assert found.averages == 10.0
    ratio = found.variance.mean() / alone.variance.mean()
    assert ratio == pytest.approx(0.4, abs=0.15)


def test_matrix_plant_needs_an_experiment_per_input():
    generator = np.random.default_rng(4)
    lines = np.fft.rfft(generator.standard_normal((5, 64)))
    frequency = np.arange(33.0)
    gain = np.array([[1.0, 2.0], [0.5, -1.0]])
    experiments = []
    for _ in range(3):
        u = np.fft.rfft(generator.standard_normal((2, 64)))
        mean = np.concatenate([u, gain @ u])
        noise = 0.01 * (generator.standard_normal((4, 5, 33)) + 1j * lines[:, :33].real)
        experiments.append(periodic_lines(mean[:, None] + noise, frequency))
    found = periodic_response(experiments, [0, 1], [0, 1], [2, 3])
    assert np.abs(found.response - gain).max() < 0.1
    with pytest.raises(ValueError, match="1 experiments"):
        periodic_response(experiments[:1], [0, 1], [0, 1], [2, 3])


def test_one_period_is_refused():
    with pytest.raises(ValueError, match="1 period"):
        periodic_lines(np.ones((2, 1, 5), dtype=complex), np.arange(5.0))


@pytest.mark.parametrize("period", [100, 256, 333])
def test_the_period_is_found(period):
    generator = np.random.default_rng(5)
    signal = np.tile(generator.standard_normal(period), 4)[: 3 * period + 17]
    assert excitation_period(signal) == period


def test_what_does_not_repeat_has_no_period():
    generator = np.random.default_rng(6)
    noise = generator.standard_normal(4096)
    assert excitation_period(noise) == 0
    assert excitation_period(np.zeros(100)) == 0
    assert excitation_period(np.tile(noise[:256], 4) + 1e-3 * noise[:1024]) == 0


def test_settling_is_seen():
    generator = np.random.default_rng(7)
    lines = 5.0 + 0.1 * (
        generator.standard_normal((2, 12, 50)) + 1j * generator.standard_normal((2, 12, 50))
    )
    assert settled_period(lines) == 0
    lines[:, :3] += np.array([2.0, 0.8, 0.3])[:, None]
    assert settled_period(lines) == 3


def test_dwells_of_a_stepped_sine():
    driven = np.array([0.0, 0, 10, 10, 10, 20, 20, np.nan, 30])
    assert dwells(driven) == [(2, 5), (5, 7), (8, 9)]


def test_stepped_sine_phasors_are_exact_without_noise():
    time = np.arange(5000) * PERIOD
    wave = 2.0 * np.cos(2 * np.pi * 777.7 * time + 0.3) + 5.0
    found = sine_phasors(wave[None], 777.7, PERIOD)
    np.testing.assert_allclose(found, 2.0 * np.exp(0.3j), rtol=1e-9)
    with pytest.raises(ValueError, match="cycles"):
        sine_phasors(wave[None, :40], 777.7, PERIOD)


def test_stepped_sine_variance_is_as_stated():
    generator = np.random.default_rng(8)
    time = np.arange(4000) * PERIOD
    ratios = []
    for _ in range(400):
        signals = np.stack([np.cos(2 * np.pi * 1234.5 * time)] * 2)
        signals[1] += 0.3 * generator.standard_normal(4000)
        phasors = sine_phasors(signals, 1234.5, PERIOD)[:, :, None]
        found = periodic_response([periodic_lines(phasors, np.array([1234.5]))], [0], [0], [1])
        ratios.append([np.abs(found.response[0, 0, 0] - 1) ** 2, found.variance[0, 0, 0]])
    ratios = np.array(ratios).mean(axis=0)
    assert ratios[0] / ratios[1] == pytest.approx(1.0, abs=0.12)


def test_local_polynomial_in_closed_loop():
    """Random excitation, one record: stated variance, correlation of neighbours, no bias."""
    generator = np.random.default_rng(9)
    errors, stated = [], []
    for _ in range(60):
        r, v = generator.standard_normal((2, 8192))
        u, y = loop(r, 0.5 * v)
        found = local_polynomial_response(np.stack([r, u, y]), PERIOD, 0, 1, 2, neighbours=8)
        errors.append(found.response[:, 0, 0] - plant(found.frequency))
        stated.append(found.variance[:, 0, 0])
    errors, stated = np.array(errors), np.array(stated)
    assert np.mean(np.abs(errors) ** 2) / np.mean(stated) == pytest.approx(1.0, abs=0.03)
    neighbours = np.mean(errors[:, 1:] * errors[:, :-1].conj()).real / np.mean(np.abs(errors) ** 2)
    assert neighbours == pytest.approx(found.correlation[1], abs=0.05)


def test_local_polynomial_removes_the_transient():
    """A record that starts far from rest, without noise: leakage is gone to 1e-4."""
    generator = np.random.default_rng(10)
    u = generator.standard_normal(8192)
    y = lfilter([1.0], [1.0, -0.9], u, zi=[300.0])[0]
    found = local_polynomial_response(np.stack([u, y]), PERIOD, 0, 0, 1)
    error = np.abs(found.response[:, 0, 0] / plant(found.frequency) - 1.0)
    plain = np.fft.rfft(y) / np.fft.rfft(u)
    at = np.round(found.frequency * 8192 * PERIOD).astype(int)
    assert np.median(error) < 1e-4
    assert np.median(np.abs(plain[at] / plant(found.frequency) - 1.0)) > 1e-2


def test_local_polynomial_refuses_a_short_record():
    with pytest.raises(ValueError, match="neighbours"):
        local_polynomial_response(np.ones((2, 20)), PERIOD, 0, 0, 1)
