import numpy as np
import pytest

from identkit.methods.averaged_spectra import SpectrumAverager, averaged_spectra
from identkit.methods.direct_bias import direct_bias
from identkit.methods.direct_response import input_noise_response, output_noise_response
from identkit.methods.joint_input_output import joint_response
from identkit.methods.line_correlation import (
    inflated_covariance,
    line_correlation,
    pooled_inflation,
)
from identkit.methods.spectral_windows import window_samples

PERIOD = 2e-5


def record(seed=1, channels=3, samples=5000):
    return np.random.default_rng(seed).standard_normal((channels, samples))


def test_chunks_of_any_size_give_the_same_spectra():
    whole = averaged_spectra(record(), PERIOD, 256)
    averager = SpectrumAverager(3, 256, PERIOD)
    for part in np.split(record(), [10, 11, 300, 2222, 4999], axis=1):
        averager.add(part)
    pieces = averager.result()
    assert pieces.segments == whole.segments == 38
    np.testing.assert_allclose(pieces.density, whole.density, rtol=1e-12)


def test_a_new_record_shares_no_segment_with_the_one_before():
    averager = SpectrumAverager(3, 256, PERIOD)
    averager.add(record(samples=300))
    averager.end_record()
    averager.add(record(seed=2, samples=300))
    both = averager.result()
    one = averaged_spectra(record(samples=300), PERIOD, 256)
    two = averaged_spectra(record(seed=2, samples=300), PERIOD, 256)
    assert both.segments == 2
    assert both.averages == pytest.approx(2.0)
    np.testing.assert_allclose(both.density, (one.density + two.density) / 2, rtol=1e-12)


def test_a_record_without_a_whole_segment_is_refused():
    averager = SpectrumAverager(3, 256, PERIOD)
    averager.add(record(samples=255))
    with pytest.raises(ValueError, match="no whole segment"):
        averager.result()


@pytest.mark.parametrize(("segment", "overlap"), [(3, 0.5), (64, 1.0), (64, -0.1)])
def test_options_out_of_range_are_refused(segment, overlap):
    with pytest.raises(ValueError, match="found segments"):
        SpectrumAverager(1, segment, PERIOD, overlap=overlap)


def first_order(white):
    """A smooth response, y(t) = 0.5 y(t-1) + u(t), and its frequency response."""
    from scipy.signal import lfilter

    return lfilter([1.0], [1.0, -0.5], white)


def plant(frequency):
    return 1.0 / (1.0 - 0.5 * np.exp(-2j * np.pi * frequency * PERIOD))


def loop(generator, samples, noise):
    """A loop with a sample of delay: u = r - 0.4 y(t-1), y = first order of u, plus v."""
    from scipy.signal import lfilter

    r, v = generator.standard_normal((2, samples)) * np.array([[1.0], [noise]])
    # u (1 + 0.4 q^-1 / (1 - 0.5 q^-1)) = r - 0.4 q^-1 v
    driven = r.copy()
    driven[1:] -= 0.4 * v[:-1]
    u = lfilter([1.0, -0.5], [1.0, -0.1], driven)
    return np.stack([r, u, first_order(u) + v])


def ratios(estimates, truth):
    """Mean squared error over mean stated variance, over lines and trials."""
    inner = slice(4, -4)
    errors = np.array([np.abs(e.response[inner, 0, 0] - truth[inner]) ** 2 for e in estimates])
    stated = np.array([e.variance[inner, 0, 0] for e in estimates])
    return errors.mean() / stated.mean(), errors.mean(axis=0) / stated.mean(axis=0)


@pytest.mark.parametrize(("window", "overlap"), [("hann", 0.5), ("hann", 0.0), ("hamming", 0.5)])
def test_the_variance_in_open_loop_is_as_stated(window, overlap):
    generator, estimates = np.random.default_rng(5), []
    for _ in range(150):
        u, v = generator.standard_normal((2, 128 * 24))
        spectra = averaged_spectra(
            np.stack([u, first_order(u) + 0.7 * v]), PERIOD, 128, window=window, overlap=overlap
        )
        estimates.append(output_noise_response(spectra, [0], [1]))
    assert ratios(estimates, plant(spectra.frequency))[0] == pytest.approx(1.0, abs=0.03)


def test_the_variance_in_closed_loop_is_as_stated_and_the_estimate_is_not_biased():
    generator, estimates = np.random.default_rng(6), []
    for _ in range(800):
        spectra = averaged_spectra(loop(generator, 128 * 20, 0.7), PERIOD, 128)
        estimates.append(joint_response(spectra, [0], [1], [2]))
    truth = plant(spectra.frequency)
    assert ratios(estimates, truth)[0] == pytest.approx(1.0, abs=0.03)
    mean = np.mean([e.response[4:-4, 0, 0] for e in estimates], axis=0)
    standard = np.sqrt(np.mean([e.variance[4:-4, 0, 0] for e in estimates], axis=0) / 800)
    assert np.sqrt(np.mean(np.abs(mean - truth[4:-4]) ** 2 / standard**2)) < 1.2


def test_errors_are_circular():
    generator, errors = np.random.default_rng(7), []
    for _ in range(100):
        spectra = averaged_spectra(loop(generator, 128 * 20, 0.7), PERIOD, 128)
        estimate = joint_response(spectra, [0], [1], [2])
        errors.append(estimate.response[4:-4, 0, 0] - plant(spectra.frequency)[4:-4])
    errors = np.array(errors)
    assert abs(np.mean(errors**2)) < 0.03 * np.mean(np.abs(errors) ** 2)


def test_the_direct_estimate_is_found_biased_in_closed_loop_and_only_there():
    generator = np.random.default_rng(8)
    spectra = averaged_spectra(loop(generator, 128 * 400, 1.0), PERIOD, 128)
    closed = direct_bias(
        output_noise_response(spectra, [1], [2]), joint_response(spectra, [0], [1], [2])
    )
    assert closed.matters
    chances = []
    for _ in range(60):
        r, w, v = generator.standard_normal((3, 128 * 40))
        u = r + 0.5 * w  # a disturbance at the input that owes nothing to the output's noise
        opened = averaged_spectra(np.stack([r, u, first_order(u) + v]), PERIOD, 128)
        chances.append(
            direct_bias(
                output_noise_response(opened, [1], [2]), joint_response(opened, [0], [1], [2])
            ).chance
        )
    assert np.mean(np.array(chances) < 0.05) < 0.17


def test_an_input_that_is_the_excitation_cannot_be_biased():
    r, v = np.random.default_rng(9).standard_normal((2, 4096))
    spectra = averaged_spectra(np.stack([r, r, first_order(r) + v]), PERIOD, 128)
    found = direct_bias(
        output_noise_response(spectra, [1], [2]), joint_response(spectra, [0], [1], [2])
    )
    assert not found.matters
    assert found.chance == 1.0


def test_lines_the_excitation_does_not_reach_are_weak():
    generator = np.random.default_rng(10)
    r, v = generator.standard_normal((2, 128 * 30))
    r = np.convolve(r, np.ones(16) / 16, mode="same")  # nulls at multiples of 1/16 of the rate
    u = r + 0.3 * v
    spectra = averaged_spectra(np.stack([r, u, first_order(u)]), PERIOD, 128)
    estimate = joint_response(spectra, [0], [1], [2])
    assert estimate.weak[[16, 24, 32, 40, 48, 56]].all()
    assert not estimate.weak[1:6].any()


def test_a_matrix_plant_in_closed_loop():
    """Two inputs, two outputs, static gain and loop: every element within its stated error."""
    generator = np.random.default_rng(11)
    gain, feedback = np.array([[1.0, -0.5], [0.3, 2.0]]), np.array([[0.2, 0.0], [0.1, 0.15]])
    scaled = []
    for _ in range(60):
        r, v = generator.standard_normal((2, 2, 64 * 30))
        u = np.linalg.solve(np.eye(2) + feedback @ gain, r - feedback @ (0.5 * v))
        spectra = averaged_spectra(np.vstack([r, u, gain @ u + 0.5 * v]), PERIOD, 64)
        estimate = joint_response(spectra, [0, 1], [2, 3], [4, 5])
        error = np.abs(estimate.response[2:-2] - gain) ** 2
        scaled.append(error / estimate.variance[2:-2])
    assert np.mean(scaled, axis=(0, 1)) == pytest.approx(np.ones((2, 2)), abs=0.13)


def test_units_of_the_channels_only_scale_the_estimate():
    generator = np.random.default_rng(12)
    signals = loop(generator, 4096, 0.5)
    plain = joint_response(averaged_spectra(signals, PERIOD, 128), [0], [1], [2])
    scaled = joint_response(
        averaged_spectra(signals * np.array([[1e9], [1e-6], [1e6]]), PERIOD, 128), [0], [1], [2]
    )
    np.testing.assert_allclose(scaled.response, plain.response * 1e12, rtol=1e-9)
    np.testing.assert_allclose(scaled.variance, plain.variance * 1e24, rtol=1e-9)
    np.testing.assert_allclose(scaled.coherence, plain.coherence, rtol=1e-9, atol=1e-12)


def test_too_few_averages_are_refused():
    spectra = averaged_spectra(record(samples=256), PERIOD, 256)
    with pytest.raises(ValueError, match="1 averages"):
        output_noise_response(spectra, [0], [1])
    with pytest.raises(ValueError, match="expected at least 2"):
        joint_response(spectra, [0], [1, 2], [0])


def test_noise_on_the_input_asks_for_the_other_estimate():
    generator = np.random.default_rng(13)
    u, noise = generator.standard_normal((2, 64 * 400))
    spectra = averaged_spectra(np.stack([u + 0.5 * noise, first_order(u)]), PERIOD, 64)
    estimate = input_noise_response(spectra, [0], [1])
    error = np.abs(estimate.response[3:-3, 0, 0] - plant(spectra.frequency)[3:-3])
    assert np.mean(error**2 / estimate.variance[3:-3, 0, 0]) == pytest.approx(1.0, abs=0.4)


def test_hann_inflates_pooled_variances_as_known():
    hann = window_samples("hann", 512)
    apart = line_correlation(hann, 512, 20)
    assert apart[1:3] == pytest.approx([4 / 9, 1 / 36], abs=1e-9)
    assert pooled_inflation(apart) == pytest.approx(35 / 18, abs=1e-9)  # 512 sum w^4 / (sum w^2)^2


@pytest.mark.parametrize("overlap", [0.0, 0.5])
def test_line_correlation_agrees_with_simulation(overlap):
    generator, errors = np.random.default_rng(14), []
    for _ in range(300):
        u, v = generator.standard_normal((2, 64 * 12))
        spectra = averaged_spectra(np.stack([u, v]), PERIOD, 64, overlap=overlap)
        errors.append(output_noise_response(spectra, [0], [1]).response[3:-3, 0, 0])
    errors = np.array(errors)
    power = np.mean(np.abs(errors) ** 2)
    for lag in (1, 2, 3):
        seen = np.mean(errors[:, lag:] * errors[:, :-lag].conj()).real / power
        expected = spectra.correlation[lag] if lag < spectra.correlation.size else 0.0
        assert seen == pytest.approx(expected, abs=0.03)


def test_inflated_covariance_is_the_usual_one_for_independent_lines():
    generator = np.random.default_rng(15)
    jacobian = (generator.standard_normal((50, 3)) + 1j * generator.standard_normal((50, 3))) * [
        1.0,
        1e6,
        1e-6,
    ]
    usual = 0.5 * np.linalg.inv(np.real(jacobian.conj().T @ jacobian))
    np.testing.assert_allclose(inflated_covariance(jacobian, np.ones(1)), usual, rtol=1e-9)


def test_inflated_covariance_agrees_with_simulation():
    generator = np.random.default_rng(16)
    correlation = np.array([1.0, 4 / 9, 1 / 36])
    line = np.linspace(-1, 1, 60)
    jacobian = np.stack([np.exp(2j * line), 1j * line * np.exp(2j * line)], axis=1)
    middle = sum(
        c * (np.eye(60, k=k) + (k > 0) * np.eye(60, k=-k)) for k, c in enumerate(correlation)
    )
    root = np.linalg.cholesky(middle)
    errors = root @ (generator.standard_normal((2, 60, 4000)) / np.sqrt(2))
    errors = errors[0] + 1j * errors[1]
    found = np.linalg.solve(
        np.real(jacobian.conj().T @ jacobian), np.real(jacobian.conj().T @ errors)
    )
    stated = inflated_covariance(jacobian, correlation)
    np.testing.assert_allclose(np.cov(found).diagonal(), stated.diagonal(), rtol=0.08)
