"""Twelve estimates of one thing: does the variance that coherence states match their scatter?

Data: datasets/seismometer_pair (recordings of the obspy 1.5.1 source distribution). The scatter
between blocks needs no formula and is the reference.
"""

from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

FOLDER = Path(__file__).parents[2] / "datasets" / "seismometer_pair"
AVERAGES = 14

pytestmark = pytest.mark.outside


def blocks():
    tables = np.array(
        [np.loadtxt(p, delimiter=",", skiprows=1) for p in sorted(FOLDER.glob("block_*.csv"))]
    )
    return tables[0, :, 0], tables[:, :, 1] + 1j * tables[:, :, 2], tables[:, :, 3]


def scatter_over_variance(responses, variance):
    """Return pooled reduced chi-square of the blocks about their weighted mean, and its freedom."""
    mean = (responses / variance).sum(axis=0) / (1.0 / variance).sum(axis=0)
    freedom = 2 * (responses.shape[0] - 1) * responses.shape[1]
    return 2.0 * (np.abs(responses - mean) ** 2 / variance).sum() / freedom, freedom


def stated_variance(responses, coherence):
    """Bendat and Piersol, Random Data, ch. 9, with averages - 1."""
    return np.abs(responses) ** 2 * (1.0 - coherence) / (coherence * (AVERAGES - 1))


def test_coherence_states_the_scatter_where_the_ground_is_steady():
    frequency, responses, coherence = blocks()
    steady = frequency < 1.0
    ratio, freedom = scatter_over_variance(
        responses[:, steady], stated_variance(responses, coherence)[:, steady]
    )
    low, high = chi2.ppf([0.01, 0.99], freedom) / freedom
    assert low < ratio < high


def test_coherence_understates_the_scatter_above():
    """Why a campaign's own repeats are worth more than a coherence; page of the data set."""
    frequency, responses, coherence = blocks()
    unsteady = frequency > 3.0
    ratio, _ = scatter_over_variance(
        responses[:, unsteady], stated_variance(responses, coherence)[:, unsteady]
    )
    assert 2.0 < ratio < 3.5
