"""Spectra and responses against published values and scipy's own estimators."""

import numpy as np
import pytest
from scipy import signal

from identkit.methods.averaged_spectra import averaged_spectra
from identkit.methods.direct_bias import closed_loop_limit
from identkit.methods.direct_response import input_noise_response, output_noise_response
from identkit.methods.line_correlation import line_correlation, pooled_inflation
from identkit.methods.spectral_windows import (
    effective_averages,
    overlap_correlation,
    window_figures,
    window_samples,
)

pytestmark = pytest.mark.outside

LONG = 1 << 14


@pytest.mark.parametrize(
    ("name", "figures", "tolerance"),
    [
        ("rectangular", (1.0, 3.92, 50.0, 75.0), 0.006),
        ("hann", (1.5, 1.42, 16.7, 65.9), 0.05),
        # two entries of this row are wrong as printed (scallop loss 1.78, overlap 23.5)
        ("hamming", (1.3628, 1.7514, 23.377, 70.692), 0.0006),
        # the printed row (1.57, 1.33, 14.0, 62.7) does not belong to this window; cf. Nuttall 1981
        ("blackman", (1.6937, 1.15, 10.0004, 57.76), 0.0006),
        ("blackman-harris", (2.0044, 0.8256, 3.76, 45.999), 0.0006),
    ],
)
def test_window_figures(name, figures, tolerance):
    """Harris 1978, Table I, corrected where wrong; values from memory, recomputed."""
    samples = window_samples(name, LONG)
    found = window_figures(samples)
    half, quarter = (100.0 * overlap_correlation(samples, LONG // k) for k in (2, 4))
    computed = (found.noise_bandwidth, found.scallop_loss_db, half, quarter)
    assert computed == pytest.approx(figures, abs=tolerance)


def test_windows_are_those_of_scipy():
    """scipy.signal.get_window, periodic form, for the three names it shares."""
    for ours, theirs in (("hann", "hann"), ("hamming", "hamming"), ("rectangular", "boxcar")):
        np.testing.assert_allclose(
            window_samples(ours, 64), signal.get_window(theirs, 64), atol=1e-15
        )


@pytest.mark.parametrize(("segments", "worth"), [(7, 6.6818182), (15, 14.2605634)])
def test_effective_averages(segments, worth):
    """Welch 1967, Hann, half overlap; formula from memory."""
    found = effective_averages(window_samples("hann", LONG), LONG // 2, segments)
    assert found == pytest.approx(worth, abs=1e-5)


@pytest.mark.parametrize(
    ("window", "parts", "inflation"),
    [("hann", 2, 1.055555556), ("hann", 4, 1.9246389), ("rectangular", 2, 1.5)],
)
def test_asymptotic_inflation_of_overlap(window, parts, inflation):
    """Welch 1967, 1 + 2 sum rho_j^2; formula from memory."""
    samples, many = window_samples(window, LONG), 10**9
    found = many / effective_averages(samples, LONG // parts, many)
    assert found == pytest.approx(inflation, abs=1e-6)


def test_pooled_variances_of_neighbouring_lines():
    """35/18 for Hann without overlap (common practice: about 1.9); derived here."""
    samples = window_samples("hann", 256)
    assert pooled_inflation(line_correlation(samples, 256, 50)) == pytest.approx(1.944, abs=1e-3)


def gaussian_segments(generator, count, averages, input_noise, output_noise, plant):
    """Lines of independent Gaussian segments: (count, averages) inputs and outputs as measured."""

    def draw():
        parts = generator.standard_normal((2, count, averages)) / np.sqrt(2.0)
        return parts[0] + 1j * parts[1]

    true = draw()
    measured = true + np.sqrt(input_noise) * draw()
    return measured, plant * true + abs(plant) * np.sqrt(output_noise) * draw()


def as_spectra(measured, output, averages):
    from identkit.methods.averaged_spectra import AveragedSpectra

    both = np.stack([measured, output], axis=1)
    density = np.einsum("lik,ljk->lij", both, both.conj()) / averages
    return AveragedSpectra(
        np.arange(len(measured)) + 1.0, density, averages, float(averages), np.ones(1)
    )


def test_random_error_of_magnitude_and_phase():
    """Bendat & Piersol chapter 9: sqrt((1-g2)/(2 n g2)) = 0.0707 at g2 = 0.5, n = 100."""
    generator = np.random.default_rng(1)
    # output noise equal to the output: coherence 0.5
    lines = gaussian_segments(generator, 20_000, 100, 0.0, 1.0, 2.0 - 1.0j)
    estimate = output_noise_response(as_spectra(*lines, 100), [0], [1])
    ratio = estimate.response[:, 0, 0] / (2.0 - 1.0j)
    assert np.std(np.abs(ratio)) == pytest.approx(0.0707107, rel=0.02)
    assert np.std(np.angle(ratio)) == pytest.approx(0.0707107, rel=0.02)
    stated = np.sqrt(np.mean(estimate.variance[:, 0, 0]) / 2.0) / abs(2.0 - 1.0j)
    assert stated == pytest.approx(0.0707107, rel=0.02)
    # standard error of coherence, sqrt(2) (1-g2) g / sqrt(n) = 0.05
    assert np.std(estimate.coherence[:, 0]) == pytest.approx(0.05, rel=0.02)


@pytest.mark.parametrize("averages", [10, 32, 100])
def test_coherence_of_unrelated_signals(averages):
    """Carter et al. 1973: mean 1/n, exceeded by 5 % at 1 - 0.05^(1/(n-1))."""
    generator = np.random.default_rng(2)
    parts = generator.standard_normal((4, 20_000, averages))
    spectra = as_spectra(parts[0] + 1j * parts[1], parts[2] + 1j * parts[3], averages)
    coherence = output_noise_response(spectra, [0], [1]).coherence[:, 0]
    assert np.mean(coherence) == pytest.approx(1.0 / averages, rel=0.02)
    level = {10: 0.283129, 32: 0.0921141, 100: 0.0298067}[averages]
    assert np.quantile(coherence, 0.95) == pytest.approx(level, rel=0.02)


def test_noise_on_input_and_output():
    """Bendat & Piersol; Mitchell 1982: H1 = H/(1+a), H2 = H (1+b) for a = 0.1, b = 0.2."""
    generator = np.random.default_rng(3)
    spectra = as_spectra(*gaussian_segments(generator, 4000, 200, 0.1, 0.2, 1.5j), 200)
    first = np.mean(output_noise_response(spectra, [0], [1]).response) / 1.5j
    second = np.mean(input_noise_response(spectra, [0], [1]).response) / 1.5j
    assert first.real == pytest.approx(0.9090909, rel=0.005)
    assert second.real == pytest.approx(1.2, rel=0.005)


PLANT, CONTROLLER = 2.0 - 1.0j, 0.5 + 0.3j


def test_bias_of_the_direct_estimate_in_closed_loop():
    """Wellstead 1981; Ljung: closed form 1.584507 - 0.7746479j, and what the estimator gives."""
    expected = 1.584507 - 0.7746479j
    assert closed_loop_limit(PLANT, CONTROLLER, 1.0, 0.4) == pytest.approx(expected, abs=1e-6)
    parts = np.random.default_rng(4).standard_normal((4, 4000, 100)) / np.sqrt(2.0)
    r, v = parts[0] + 1j * parts[1], np.sqrt(0.4) * (parts[2] + 1j * parts[3])
    u = (r - CONTROLLER * v) / (1.0 + CONTROLLER * PLANT)
    # the closed form is for excitation and noise as they enter the loop's input
    spectra = as_spectra(u, PLANT * u + v, 100)
    found = np.mean(output_noise_response(spectra, [0], [1]).response)
    assert found == pytest.approx(expected, abs=0.008)


def test_limits_of_the_direct_estimate():
    """No excitation gives -1/C, no noise gives P (same sources)."""
    no_excitation = closed_loop_limit(PLANT, CONTROLLER, 0.0, 0.4)
    assert no_excitation == pytest.approx(-1.470588235 + 0.8823529412j, abs=1e-6)
    assert closed_loop_limit(PLANT, CONTROLLER, 1.0, 0.0) == pytest.approx(2.0 - 1.0j, abs=1e-9)


@pytest.mark.parametrize("segment", [256, 255])
@pytest.mark.parametrize("window", ["hann", "hamming"])
def test_spectra_are_those_of_scipy(segment, window):
    """scipy.signal.csd with the same window, overlap and removal of the mean."""
    generator = np.random.default_rng(5)
    pair = generator.standard_normal((2, 5000)) + np.array([[3.0], [-1.0]])
    ours = averaged_spectra(pair, 1e-3, segment, window=window)
    hop = round(segment / 2)
    for i in range(2):
        for j in range(2):
            frequency, theirs = signal.csd(
                pair[j], pair[i], 1e3, window=window, nperseg=segment, noverlap=segment - hop
            )
            np.testing.assert_allclose(ours.density[:, i, j], theirs, rtol=1e-9, atol=1e-15)
    np.testing.assert_allclose(ours.frequency, frequency)


def test_coherence_is_that_of_scipy():
    """scipy.signal.coherence."""
    generator = np.random.default_rng(6)
    u, v = generator.standard_normal((2, 5000))
    spectra = averaged_spectra(np.stack([u, u + v]), 1e-3, 256)
    theirs = signal.coherence(u, u + v, 1e3, nperseg=256)[1]
    ours = output_noise_response(spectra, [0], [1]).coherence[:, 0]
    np.testing.assert_allclose(ours, theirs, rtol=1e-9)
