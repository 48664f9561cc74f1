"""Exponentially weighted moving average of a series, and its limits.

Sources: S. W. Roberts, "Control chart tests based on geometric moving averages", Technometrics 1
(1959) 239-250; J. M. Lucas and M. S. Saccucci, "Exponentially weighted moving average control
schemes: properties and enhancements", Technometrics 32 (1990) 1-12 (asymptotic limits).
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def ewma(values: FloatArray, weight: float, start: float = 0.0) -> FloatArray:
    """Return z_t = weight x_t + (1 - weight) z_{t-1}.

    Parameters
    ----------
    values
        (points,) a NaN point leaves the average as it is.
    weight
        Of the newest point, in (0, 1].
    start
        z_0.

    Returns
    -------
    FloatArray
        (points,) in the unit of the values.
    """
    result, current = np.empty(len(values)), start
    for at, value in enumerate(values):
        if np.isfinite(value):
            current += weight * (value - current)
        result[at] = current
    return result


def ewma_deviation(weight: float) -> float:
    """Return the asymptotic standard deviation of the average over that of a point."""
    return float(np.sqrt(weight / (2.0 - weight)))
