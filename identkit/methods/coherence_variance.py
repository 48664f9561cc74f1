"""Variance of an averaged frequency response from its coherence (Bendat & Piersol 2010).

The relative standard deviation of |H| from n averages is sqrt((1 - g2) / (2 g2 n)), g2 being the
magnitude-squared coherence (J. S. Bendat and A. G. Piersol, Random Data, 4th ed., Wiley 2010,
chapter 9); both parts together have twice that squared. With n - 1 in place of n the estimate
allows for the g2 that was itself estimated from the same averages.
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

# A coherence printed as 1 is 1 within its digits, never without noise; and at 0 nothing is known.
SMALLEST_INCOHERENCE = 1e-6
SMALLEST_COHERENCE = 1e-6


def coherence_variance(
    response: ComplexArray, coherence: FloatArray, averages: float
) -> FloatArray:
    """Return E|error|^2 (total of both parts) of a response measured in open loop.

    Parameters
    ----------
    response
        Measured response.
    coherence
        Magnitude-squared coherence of the same points, 0 to 1. It is held between 1e-6 and
        1 - 1e-6, so that no point counts as known without error.
    averages
        Number of independent averages, above 1.

    Returns
    -------
    FloatArray
        |H|^2 (1 - g2) / (g2 (averages - 1)), in the square of the response's unit.

    Raises
    ------
    ValueError
        If `averages` is not above 1: the coherence of a single average is 1 whatever the noise.

    Notes
    -----
    Does not apply in closed loop, where input and noise are correlated.
    """
    if averages <= 1:
        raise ValueError(f"found averages = {averages}; expected more than 1")
    held = np.clip(coherence, SMALLEST_COHERENCE, 1.0 - SMALLEST_INCOHERENCE)
    return np.asarray(np.abs(response) ** 2 * (1.0 - held) / (held * (averages - 1.0)))
