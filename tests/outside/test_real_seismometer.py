"""A strongly damped mode at millihertz: published poles of a broadband seismometer.

Source: datasets/broadband_seismometer (obspy 1.5.1 source distribution): poles
-0.03677 +- 0.03703j rad/s, double zero at rest, gain 1500. The reference for responses is
scipy.signal's own evaluation of poles and zeros.
"""

from pathlib import Path

import numpy as np
import pytest
from scipy.signal import freqs_zpk

FOLDER = Path(__file__).parents[2] / "datasets" / "broadband_seismometer"
POLE = -0.03677 + 0.03703j
GAIN = 1500.0
UNDAMPED_HZ = abs(POLE) / (2.0 * np.pi)
DAMPING_RATIO = -POLE.real / abs(POLE)

pytestmark = pytest.mark.outside


def published_response(frequency, scale=1.0):
    """Return the response of the published poles with the time axis shortened by `scale`."""
    poles = scale * np.array([POLE, POLE.conjugate()])
    return freqs_zpk([0.0, 0.0], poles, GAIN, worN=2.0 * np.pi * frequency)[1]


def stored_response():
    table = np.loadtxt(FOLDER / "reference_response.csv", delimiter=",", skiprows=1)
    return table[:, 0], table[:, 1] * np.exp(1j * table[:, 2])


def test_poles_give_the_published_mode():
    assert pytest.approx(8.305e-3, abs=5e-7) == UNDAMPED_HZ
    assert pytest.approx(0.7046, abs=5e-5) == DAMPING_RATIO


def test_stored_response_is_that_of_the_poles():
    frequency, response = stored_response()
    np.testing.assert_allclose(response, published_response(frequency), rtol=1e-10)
