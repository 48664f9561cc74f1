"""Intervals of a modal fit to averaged spectra cover what they say only with the correlation in."""

import numpy as np
import pytest
from scipy.signal import lfilter

from identkit.methods.averaged_spectra import averaged_spectra
from identkit.methods.direct_response import output_noise_response
from identkit.methods.line_correlation import inflated_covariance, pooled_inflation
from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_model import ModalParameters, modal_derivatives, modal_response

RATE, SEGMENT, TRIALS = 10_000.0, 1024, 400
PLANT = ModalParameters(*(np.array([v]) for v in (1000.0, 0.06, 4e7, 0.0)), "none")


def estimates(generator):
    """Averaged spectra of one resonance, made in the frequency domain from periodic records.

    The record is one period of a periodic signal, so the response of its lines is exactly the
    plant; what is left is the noise, and the window's effect on it.
    """
    samples = SEGMENT * 10
    frequency = np.fft.rfftfreq(samples, 1.0 / RATE)
    response = modal_response(np.maximum(frequency, 1e-3), PLANT)
    for _ in range(TRIALS):
        u = generator.standard_normal(samples)
        y = np.fft.irfft(response * np.fft.rfft(u), samples)
        y = y + 2.0 * lfilter([1.0], [1.0, -0.3], generator.standard_normal(samples))
        spectra = averaged_spectra(np.stack([u, y]), 1.0 / RATE, SEGMENT)
        found = output_noise_response(spectra, [0], [1])
        use = (found.frequency > 300.0) & (found.frequency < 3000.0)
        yield found.frequency[use], found.response[use, 0, 0], found.variance[use, 0, 0], found


def smoothed(variance):
    """About 17 averages tell the variance of one line badly; 15 lines together tell it well."""
    return np.convolve(np.pad(variance, 7, mode="edge"), np.ones(15) / 15, mode="valid")


@pytest.mark.slow
def test_intervals_of_modal_frequency_cover_as_stated():
    """95 % intervals: about 85 % as if lines were independent, 95 % with their correlation."""
    scaled, naive = [], []
    for frequency, response, variance, found in estimates(np.random.default_rng(2)):
        fit = fit_modal_model(
            frequency,
            response,
            smoothed(variance),
            base="none",
            modes=1,
            delay=False,
            feedthrough=False,
        )
        place = fit.parameter_names.index("modal_frequency_1")
        slopes = modal_derivatives(frequency, fit.parameters, general=False)[:, 2:]
        smooth = smoothed(variance)
        covariance = inflated_covariance(slopes / np.sqrt(smooth)[:, None], found.correlation)
        error = fit.parameters.modal_frequency[0] - 1000.0
        scaled.append(error / np.sqrt(covariance[0, 0]))
        naive.append(error / np.sqrt(fit.covariance[place, place]))
    inside = np.mean(np.abs(scaled) < 1.96)
    assert 0.93 <= inside <= 0.97
    assert np.mean(np.abs(naive) < 1.96) < 0.90
    widening = np.std(naive) / np.std(scaled)
    assert widening**2 == pytest.approx(pooled_inflation(found.correlation), rel=0.15)
