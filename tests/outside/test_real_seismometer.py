"""A strongly damped mode at millihertz: published poles of a broadband seismometer.

Source: datasets/broadband_seismometer (obspy 1.5.1 source distribution): poles
-0.03677 +- 0.03703j rad/s, double zero at rest, gain 1500. The reference for responses is
scipy.signal's own evaluation of poles and zeros.
"""

from pathlib import Path

import numpy as np
import pytest
from scipy.signal import freqs_zpk

from identkit.methods.modal_fit import fit_modal_model
from identkit.outcomes import Outcome
from identkit.readers.campaign import read_responses

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


MILLIHERTZ_GRID = np.geomspace(1e-3, 1.0, 200)
SCALES = (1.0, 1e6, 1e12)


@pytest.mark.parametrize("residues", ["general", "auto"])
@pytest.mark.parametrize("modes", [1, "auto"])
@pytest.mark.parametrize("scale", SCALES)
def test_published_mode_is_found_at_any_scale(scale, modes, residues):
    """Same answer at millihertz, kilohertz and gigahertz, down to rounding."""
    frequency = scale * MILLIHERTZ_GRID
    response = published_response(frequency, scale)
    fit = fit_modal_model(frequency, response, None, base="none", modes=modes, residues=residues)
    assert fit.outcome == Outcome.DONE
    np.testing.assert_allclose(fit.parameters.modal_frequency, [scale * UNDAMPED_HZ], rtol=1e-10)
    np.testing.assert_allclose(fit.parameters.damping_ratio, [DAMPING_RATIO], rtol=1e-10)
    assert fit.parameters.feedthrough == pytest.approx(GAIN, rel=1e-10)
    assert abs(fit.parameters.delay * scale) < 1e-9


def noisy_fit(scale):
    """Fit the published response under one per cent of noise, the same draw at every scale."""
    generator = np.random.default_rng(20)
    frequency = scale * MILLIHERTZ_GRID
    truth = published_response(frequency, scale)
    error = generator.standard_normal((2, frequency.size)) / np.sqrt(2.0)
    response = truth + 0.01 * np.abs(truth) * (error[0] + 1j * error[1])
    variance = (0.01 * np.abs(truth)) ** 2
    return fit_modal_model(
        frequency, response, variance, base="none", modes="auto", residues="general"
    )


def standard_error(fit, name):
    at = fit.parameter_names.index(name)
    return np.sqrt(fit.covariance[at, at])


def test_noise_moves_the_answer_alike_at_every_scale_and_within_its_interval():
    slow, fast = noisy_fit(1.0), noisy_fit(1e6)
    np.testing.assert_allclose(
        fast.parameters.modal_frequency, 1e6 * slow.parameters.modal_frequency, rtol=1e-6
    )
    np.testing.assert_allclose(
        fast.parameters.damping_ratio, slow.parameters.damping_ratio, rtol=1e-6
    )
    error = standard_error(slow, "modal_frequency_1")
    assert standard_error(fast, "modal_frequency_1") == pytest.approx(1e6 * error, rel=1e-4)
    assert abs(slow.parameters.modal_frequency[0] - UNDAMPED_HZ) < 3.0 * error
    assert 0.8 < slow.noise_ratio < 1.2


def test_mode_far_below_the_band_is_not_passed_off_as_found():
    """The stored response starts at six times the mode's frequency: no plain success there."""
    frequency, response = stored_response()
    fit = fit_modal_model(frequency, response, None, base="none", residues="general")
    assert fit.outcome != Outcome.DONE


def test_millihertz_column_is_read_as_such(tmp_path):
    response = published_response(MILLIHERTZ_GRID)
    table = np.column_stack([1e3 * MILLIHERTZ_GRID, np.abs(response), np.angle(response)])
    np.savetxt(
        tmp_path / "slow.csv",
        table,
        delimiter=";",
        header="f [mHz];amp [V s/m];phase",
        comments="",
        fmt="%.15g",
    )
    read = read_responses(
        [tmp_path / "slow.csv"],
        columns={
            "frequency": "f [mHz]",
            "magnitude": "amp [V s/m]",
            "phase_rad": {"name": "phase", "unit": "rad"},
        },
    )
    np.testing.assert_allclose(read["frequency"], MILLIHERTZ_GRID, rtol=1e-12)
    np.testing.assert_allclose(read["frequency_response"].values.ravel(), response, rtol=1e-12)
