"""Modes of textbook structures, recovered from noisy receptances within their intervals.

Eigenvalues of uniform beams: R. D. Blevins, *Formulas for Natural Frequency and Mode Shape*, 1979,
Table 8-1 (values from memory, recomputed here from cos cosh = -1 and +1). Receptance of a beam:
mode shapes at the drive point squared over (wk^2 - w^2 + 2 j zeta wk w) per modal mass. Two equal
masses on equal springs: w^2 = (3 -+ sqrt 5)/2 (standard).
"""

import numpy as np
import pytest
from scipy.interpolate import AAA
from scipy.optimize import brentq

from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.outcomes import Outcome

pytestmark = pytest.mark.outside

CANTILEVER = (1.87510407, 4.69409113, 7.85475744, 10.99554073, 14.13716839)
FREE_FREE = (4.73004074, 7.85320462, 10.9956078, 14.1371655, 17.2787597)
FIRST_HERTZ = 40.0


def eigenvalues(sign):
    """Roots of cos(x) cosh(x) = sign, the first five above zero."""

    def scaled(x):
        return np.cos(x) - sign / np.cosh(x)

    first = 0.0 if sign < 0 else np.pi
    return np.array([brentq(scaled, first + k * np.pi + 0.1, first + (k + 1) * np.pi + 0.1)
                     for k in range(5)])  # fmt: skip


@pytest.mark.parametrize(("sign", "table"), [(-1.0, CANTILEVER), (1.0, FREE_FREE)])
def test_roots_are_those_of_the_table(sign, table):
    np.testing.assert_allclose(eigenvalues(sign), table, atol=1e-6)


def test_cantilever_shape_factor_and_frequency_ratios():
    first = eigenvalues(-1.0)
    factor = (np.sinh(first[0]) - np.sin(first[0])) / (np.cosh(first[0]) + np.cos(first[0]))
    assert factor == pytest.approx(0.734095514, abs=1e-6)
    ratios = (first[1:4] / first[0]) ** 2
    np.testing.assert_allclose(ratios, [6.26689303, 17.54748194, 34.38606116], atol=1e-6)


def beam(table, base):
    """Tip receptance of a beam: every mode has the same modal mass and tip amplitude 2."""
    ratio = (np.array(table) / table[0]) ** 2
    natural = 2 * np.pi * FIRST_HERTZ * ratio
    damping = np.array([0.01, 0.008, 0.006, 0.009, 0.012])
    return ModalParameters(
        natural / (2 * np.pi), damping, np.full(5, 4.0), np.zeros(5), base,
        base_gain=4.0 if base == "free" else 0.0,
    )  # fmt: skip


def measured(truth, rng, relative=0.02):
    band = (0.3 * truth.modal_frequency[0], 1.4 * truth.modal_frequency[-1])
    frequency = np.geomspace(*band, 1500)
    clean = modal_response(frequency, truth)
    variance = (relative * np.abs(clean)) ** 2
    error = rng.standard_normal((2, frequency.size)) * np.sqrt(variance / 2)
    return frequency, clean + error[0] + 1j * error[1], variance


@pytest.mark.parametrize(("table", "base"), [(CANTILEVER, "none"), (FREE_FREE, "free")])
def test_beam_modes_are_recovered(table, base):
    rng = np.random.default_rng(1)
    off = []
    for _ in range(5):
        truth = beam(table, base)
        fit = fit_modal_model(*measured(truth, rng), base=base)
        assert fit.outcome == Outcome.DONE
        assert fit.parameters.modal_frequency.size == 5
        first = fit.parameter_names.index("modal_frequency_1")
        error = np.sqrt(np.diag(fit.covariance)[first:]).reshape(5, 3)
        off.append((fit.parameters.modal_frequency - truth.modal_frequency) / error[:, 0])
        off.append((fit.parameters.damping_ratio - truth.damping_ratio) / error[:, 1])
        off.append((fit.parameters.residue - truth.residue) / error[:, 2])
    # 75 draws of unit variance: standard error of the mean square 0.16
    assert np.mean(np.square(off)) == pytest.approx(1.0, abs=0.5)
    assert np.max(np.abs(off)) < 4.5


def chain(drive):
    """Receptance of two masses between wall and free end, drive point at one of them."""
    stiffness = np.array([[2.0, -1.0], [-1.0, 1.0]])
    squared, shapes = np.linalg.eigh(stiffness)
    return np.sqrt(squared), shapes[drive] ** 2


@pytest.mark.parametrize(("drive", "antiresonance"), [(0, 1.0), (1, np.sqrt(2.0))])
def test_two_mass_chain(drive, antiresonance):
    natural, residue = chain(drive)
    np.testing.assert_allclose(natural, [0.6180339887, 1.618033989], atol=1e-9)
    frequency = np.geomspace(0.1, 0.6, 900) / (2 * np.pi) * 4
    truth = ModalParameters(natural / (2 * np.pi), np.full(2, 1e-3), residue, np.zeros(2), "none")
    clean = modal_response(frequency, truth)
    rng = np.random.default_rng(2)
    variance = (0.01 * np.abs(clean)) ** 2
    error = rng.standard_normal((2, 900)) * np.sqrt(variance / 2)
    fit = fit_modal_model(
        frequency, clean + error[0] + 1j * error[1], variance, base="none", delay=False
    )
    found = fit.parameters
    assert found.modal_frequency.size == 2
    np.testing.assert_allclose(found.modal_frequency * 2 * np.pi, natural, rtol=5e-4)
    squared = (2 * np.pi * found.modal_frequency) ** 2
    zero = (found.residue @ squared[::-1]) / found.residue.sum()
    assert np.sqrt(zero) == pytest.approx(antiresonance, rel=2e-3)


def test_poles_agree_with_an_independent_rational_approximation():
    """Adaptive Antoulas-Anderson approximation (Nakatsukasa, Sete & Trefethen 2018), by scipy."""
    truth = beam(CANTILEVER, "none")
    frequency = np.geomspace(12.0, 3000.0, 1500)
    clean = modal_response(frequency, truth)
    rational = AAA(1j * frequency, clean, rtol=1e-10, clean_up=False)
    poles = rational.poles()
    poles = poles[(poles.imag > 10.0) & (np.abs(poles.real) < 0.1 * poles.imag)]
    poles = poles[np.argsort(poles.imag)]
    fit = fit_modal_model(frequency, clean, (1e-6 * np.abs(clean)) ** 2, base="none")
    found = fit.parameters
    np.testing.assert_allclose(np.abs(poles), found.modal_frequency, rtol=1e-6)
    np.testing.assert_allclose(-poles.real / np.abs(poles), found.damping_ratio, rtol=1e-4)
