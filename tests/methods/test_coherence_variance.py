import numpy as np
import pytest
from scipy import signal

from identkit.methods.coherence_variance import coherence_variance


def test_the_formula_by_hand():
    """|H|^2 (1 - g2) / (g2 (n - 1)) = 25 * 0.2 / (0.8 * 10)."""
    found = coherence_variance(np.array([3 + 4j]), np.array([0.8]), 11)
    np.testing.assert_allclose(found, [0.625], rtol=1e-14)


@pytest.mark.parametrize(("coherence", "held"), [(1.0, 1 - 1e-6), (0.0, 1e-6)])
def test_no_point_is_known_without_error_or_with_an_infinite_one(coherence, held):
    found = coherence_variance(np.array([1j]), np.array([coherence]), 2)
    np.testing.assert_allclose(found, [(1 - held) / held], rtol=1e-9)


@pytest.mark.parametrize("averages", [1, 0.5, 0])
def test_a_single_average_is_refused(averages):
    with pytest.raises(ValueError, match="expected more than 1"):
        coherence_variance(np.ones(1, complex), np.ones(1), averages)


@pytest.mark.parametrize("noise", [0.2, 1.0])
def test_it_is_the_variance_of_responses_estimated_again_and_again(noise):
    """Open loop, white input, gain 2: scipy.signal estimates, judged by their real scatter.

    4 000 independent estimates over 63 lines: the mean of the stated variances has a standard
    error well below 1 %; the tolerance of 3 % is room for the bias of a ratio of estimates.
    """
    rng = np.random.default_rng(5)
    averages, length, trials = 16, 128, 4000
    drive = rng.standard_normal((trials, averages * length))
    output = 2.0 * drive + noise * rng.standard_normal(drive.shape)
    options = {"window": "boxcar", "nperseg": length, "noverlap": 0, "detrend": False}
    _, cross = signal.csd(drive, output, **options)
    _, auto = signal.welch(drive, **options)
    _, coherence = signal.coherence(drive, output, **options)
    response = (cross / auto)[:, 1:-1]
    stated = coherence_variance(response, coherence[:, 1:-1], averages)
    scatter = np.mean(np.abs(response - 2.0) ** 2)
    assert np.mean(stated) == pytest.approx(scatter, rel=0.03)
