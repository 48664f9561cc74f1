"""Multivariate EWMA: a joint moving average of several standardised series.

Source: C. A. Lowry, W. H. Woodall, C. W. Champ and S. E. Rigdon, "A multivariate exponentially
weighted moving average control chart", Technometrics 34 (1992) 46-53.
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def multivariate_ewma(values: FloatArray, weight: float) -> FloatArray:
    """Return T2 of the moving average with its asymptotic covariance.

    Parameters
    ----------
    values
        (points, series) uncorrelated with unit variance in control; a point with a NaN leaves
        the average as it is.
    weight
        Of the newest point.

    Returns
    -------
    FloatArray
        (points,) z'z (2 - weight) / weight, where z is the moving average.
    """
    result, current = np.empty(len(values)), np.zeros(values.shape[1])
    for at, value in enumerate(values):
        if np.isfinite(value).all():
            current = current + weight * (value - current)
        result[at] = current @ current
    return result * (2.0 - weight) / weight
