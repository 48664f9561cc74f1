"""Periodic excitation against published values."""

import numpy as np
import pytest

from identkit.methods.multisine_average import PeriodicLines, periodic_lines, periodic_response
from identkit.methods.schroeder_multisine import crest_factor, multisine, schroeder_phases

pytestmark = pytest.mark.outside

U, Y = 1 + 0.5j, -0.7 + 2j
COVARIANCE = np.array([[0.01, 0.008 * np.exp(-0.7j)], [0.008 * np.exp(0.7j), 0.04]])


def test_sample_variance_of_a_multisine_response():
    """Pintelon & Schoukens, chapter 2: 0.00268025 for the values below (formula from memory)."""
    lines = PeriodicLines(np.ones(1), np.array([[U], [Y]]), COVARIANCE[None], 16)
    found = periodic_response([lines], [0], [0], [1])
    assert found.variance[0, 0, 0] == pytest.approx(0.00268025, abs=5e-9)


def test_the_same_by_simulation():
    generator = np.random.default_rng(1)
    parts = generator.standard_normal((2, 2, 16, 40_000)) / np.sqrt(2.0)
    noise = np.einsum("ij,jmk->imk", np.linalg.cholesky(COVARIANCE), parts[0] + 1j * parts[1])
    lines = periodic_lines(np.array([U, Y])[:, None, None] + noise, np.arange(40_000.0))
    found = periodic_response([lines], [0], [0], [1])
    error = np.mean(np.abs(found.response[:, 0, 0] - Y / U) ** 2)
    assert error == pytest.approx(0.00268025, rel=0.02)
    assert found.variance.mean() == pytest.approx(0.00268025, rel=0.02)


def test_crest_factor_of_schroeder_phases():
    """Schroeder 1970 (phase rule); 1.70652 for 64 equal cosines derived and computed here."""
    signal = multisine(np.arange(1, 65), np.ones(64), 4096)
    assert crest_factor(signal) == pytest.approx(1.70652, abs=1e-4)
    k = np.arange(1, 65)
    np.testing.assert_allclose(schroeder_phases(np.ones(64)), -np.pi * k * (k - 1) / 64)
