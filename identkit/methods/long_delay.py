"""A long delay found before any model: the peak of the whitened response in time.

The response is divided by its magnitude, so that resonances and slopes count no more than other
points, and summed against trial delays; a delay far beyond the period of the highest frequency
stands out as a peak.

Source: C. H. Knapp & G. C. Carter, "The generalized correlation method for estimation of time
delay", IEEE Trans. Acoust., Speech, Signal Process. 24 (1976) 320-327 (phase transform).
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

STEP = 0.5
LONGEST = 400.0
LINES = 256
LONG = 30.0
BLURS = 5.0
KEPT = 0.85
FEWEST = 16


def long_delay(frequency: FloatArray, response: ComplexArray) -> float:
    """Return a delay to take out before fitting, 0 where the delay is short.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    response
        (points,) output/input, none zero.

    Returns
    -------
    float
        Seconds. What the peak says less most of what counts as long, so that what is left is a
        positive delay within reach of a scan. Short is what is below 30 rad at the highest
        frequency, or below five times what the band can tell apart.

    Notes
    -----
    Does not see delays beyond half the inverse of the largest spacing of lines, nor beyond 400 rad.
    """
    x = frequency / frequency[-1]
    if x.size < FEWEST:
        return 0.0
    # what one trial delay cannot be told from the next by: the phase turned over the band
    blur = 2.0 * np.pi / (1.0 - x[0])
    limit = min(LONGEST, np.pi / float(np.max(np.diff(x))))
    long = max(LONG, BLURS * blur)
    if limit <= long:
        return 0.0
    trial = np.arange(0.0, limit, STEP)
    peak = float(trial[np.argmax(_whitened_sum(x, response, trial))])
    if peak <= long:
        return 0.0
    return float((peak - KEPT * long) / (2.0 * np.pi * frequency[-1]))


def _whitened_sum(x: FloatArray, response: ComplexArray, trial: FloatArray) -> FloatArray:
    lines = np.unique(np.searchsorted(x, np.linspace(x[0], 1.0, LINES)).clip(0, x.size - 1))
    white = np.gradient(x[lines]) * response[lines] / np.abs(response[lines])
    return np.asarray(np.abs(np.exp(1j * np.outer(trial, x[lines])) @ white), dtype=float)
