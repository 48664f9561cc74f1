"""Covariance of the fit against closed forms of the Cramer-Rao bound, and Monte Carlo.

One isolated mode, H = R / (j (w - w0) + sigma), known at lines d apart with circular noise of
variance s2 in a wide band: var(w0) = var(sigma) = 2 s2 d sigma^3 / (pi |R|^2); half of that where
the residue is known. Derived from the Fisher information: integrals of |H'|^2 over the whole axis.

A lightly damped mode r / (wk^2 - w^2 + 2 j zeta wk w) is near its peak such a mode with
R = r / (2 wk) (and a quarter turn), sigma = zeta wk; the other half of the axis adds terms of
relative order zeta.
"""

import numpy as np
import pytest

from identkit.methods.modal_least_squares import refine_modal_model
from identkit.methods.modal_model import ModalParameters, modal_derivatives, modal_response

pytestmark = pytest.mark.outside

SIGMA, R, NOISE, SPACING = 1.0, 2 - 1j, 1e-4, 0.02


def fisher(parameters_known):
    """Covariance of (w0, sigma) on the line grid of the closed form, band +-4000."""
    offset = np.arange(-4000.0, 4000.0, SPACING)
    inverse = 1.0 / (1j * offset + SIGMA)
    columns = [1j * R * inverse**2, -R * inverse**2]
    if not parameters_known:
        columns += [inverse, 1j * inverse]
    stacked = np.array(columns)
    return np.linalg.inv((stacked @ stacked.conj().T).real * 2.0 / NOISE)


@pytest.mark.parametrize(("known", "factor"), [(False, 2.0), (True, 1.0)])
def test_closed_form_of_one_isolated_mode(known, factor):
    expected = factor * NOISE * SPACING * SIGMA**3 / (np.pi * abs(R) ** 2)
    assert expected == pytest.approx(2.5464791e-07 * factor / 2.0, rel=1e-6)
    bound = fisher(known)
    assert bound[0, 0] == pytest.approx(expected, rel=2e-3)
    assert bound[1, 1] == pytest.approx(expected, rel=2e-3)


def light_mode():
    """A mode with zeta 1e-3 and complex residue, on lines 1/30 of its half width apart."""
    natural, zeta = 2 * np.pi * 1000.0, 1e-3
    width = zeta * 1000.0
    frequency = np.arange(1000.0 - 400 * width, 1000.0 + 400 * width, width / 30)
    plant = ModalParameters(
        np.array([1000.0]), np.array([zeta]), np.array([natural**2]), np.array([0.3 * natural]),
        "none",
    )  # fmt: skip
    return frequency, plant, natural, zeta


def test_stated_covariance_of_a_light_mode_is_the_closed_form():
    frequency, plant, natural, zeta = light_mode()
    noise = 1.0
    residue = abs(natural**2 + 1j * natural * 0.3 * natural) / (2 * natural)
    spacing = 2 * np.pi * (frequency[1] - frequency[0])
    expected = 2 * noise * spacing * (zeta * natural) ** 3 / (np.pi * residue**2)
    clean = modal_response(frequency, plant)
    fit = refine_modal_model(
        frequency, clean, np.full(frequency.size, noise), plant, delay=False, feedthrough=False
    )
    variance = np.diag(fit.covariance)
    assert variance[2] * (2 * np.pi) ** 2 == pytest.approx(expected, rel=0.01)
    assert variance[3] * natural**2 == pytest.approx(expected, rel=0.01)


def test_known_residue_halves_the_variance():
    frequency, plant, _, _ = light_mode()
    slope = modal_derivatives(frequency, plant, general=True)[:, 2:]
    slope = slope / np.linalg.norm(slope, axis=0)
    whole = np.linalg.inv((slope.conj().T @ slope).real)
    known = np.linalg.inv((slope[:, :2].conj().T @ slope[:, :2]).real)
    np.testing.assert_allclose(np.diag(known) / np.diag(whole)[:2], 0.5, rtol=0.01)


@pytest.mark.slow
def test_maximum_likelihood_attains_the_bound():
    frequency, plant, natural, zeta = light_mode()
    frequency = frequency[::20]
    clean = modal_response(frequency, plant)
    noise = (0.3 * np.max(np.abs(clean))) ** 2
    rng = np.random.default_rng(5)
    estimates = []
    for _ in range(600):
        error = rng.standard_normal((2, frequency.size)) * np.sqrt(noise / 2)
        fit = refine_modal_model(
            frequency, clean + error[0] + 1j * error[1], np.full(frequency.size, noise), plant,
            delay=False, feedthrough=False,
        )  # fmt: skip
        estimates.append([fit.parameters.modal_frequency[0], fit.parameters.damping_ratio[0]])
    residue = abs(natural**2 + 0.3j * natural**2) / (2 * natural)
    spacing = 2 * np.pi * (frequency[1] - frequency[0])
    bound = 2 * noise * spacing * (zeta * natural) ** 3 / (np.pi * residue**2)
    found = np.var(estimates, axis=0) * [(2 * np.pi) ** 2, natural**2]
    # 600 runs: standard error of a variance 5.8 %
    np.testing.assert_allclose(found / bound, 1.0, atol=0.18)
