"""Shrunk correlation: valid with few units, close to the truth with many."""

import numpy as np
import pytest

from identkit.methods.correlation_shrinkage import shrunk_correlation
from identkit.methods.modal_assurance import modal_assurance


def test_few_units_and_many_quantities_give_a_valid_matrix():
    samples = np.random.default_rng(1).normal(size=(10, 30))
    correlation, intensity = shrunk_correlation(samples)
    assert np.linalg.eigvalsh(correlation).min() > 0.0
    assert np.diag(correlation) == pytest.approx(np.ones(30))
    assert intensity > 0.6


def test_many_units_give_their_own_correlation():
    rng = np.random.default_rng(2)
    common = rng.normal(size=(4000, 1))
    samples = common + 0.5 * rng.normal(size=(4000, 4))
    correlation, intensity = shrunk_correlation(samples)
    assert intensity < 0.01
    assert correlation[0, 1:] == pytest.approx(np.full(3, 0.8), abs=0.02)


def test_intensity_agrees_with_its_definition_term_by_term():
    # equations of section 2.4 and appendix A, with deviations divided by n - 1
    samples = np.random.default_rng(3).normal(size=(9, 4)) @ np.triu(np.ones((4, 4)))
    units = len(samples)
    scaled = (samples - samples.mean(axis=0)) / samples.std(axis=0, ddof=1)
    variance = squares = 0.0
    for i in range(4):
        for j in range(4):
            if i == j:
                continue
            product = scaled[:, i] * scaled[:, j]
            scatter = ((product - product.mean()) ** 2).sum()
            variance += units / (units - 1) ** 3 * scatter
            squares += (units / (units - 1) * product.mean()) ** 2
    assert 0.0 < variance / squares < 1.0
    assert shrunk_correlation(samples)[1] == pytest.approx(variance / squares, rel=1e-9)


def test_quantities_that_do_not_vary_correlate_with_nothing():
    samples = np.random.default_rng(4).normal(size=(20, 3))
    samples[:, 1] = 0.0
    correlation, _ = shrunk_correlation(samples)
    assert correlation[1].tolist() == [0.0, 1.0, 0.0]
    assert np.array_equal(shrunk_correlation(samples[:2])[0], np.eye(3))


def test_a_shape_of_zeros_has_no_assurance():
    assert np.isnan(modal_assurance([0.0, 0.0], [1.0, 0.0])[0, 0])
