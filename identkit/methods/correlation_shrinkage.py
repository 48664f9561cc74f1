r"""Correlation of many quantities seen on few units, shrunk towards none.

.. math:: r^*_{ij} = (1 - \lambda) r_{ij}, \quad
   \lambda = \sum_{i \ne j} \mathrm{Var}(r_{ij}) / \sum_{i \ne j} r_{ij}^2

Source: J. Schaefer and K. Strimmer, "A shrinkage approach to large-scale covariance matrix
estimation and implications for functional genomics", Statistical Applications in Genetics and
Molecular Biology 4 (2005) 32.
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def shrunk_correlation(samples: FloatArray) -> tuple[FloatArray, float]:
    """Return a positive definite correlation matrix and its shrinkage (Schaefer, Strimmer 2005).

    Parameters
    ----------
    samples
        (units, quantities) finite values; a quantity that does not vary correlates with nothing.

    Returns
    -------
    tuple
        (quantities, quantities) correlation, and the intensity between 0 (the sample's own
        correlation) and 1 (none).

    Notes
    -----
    With fewer than three units nothing can be said and the identity is returned, intensity 1.
    """
    units, quantities = samples.shape
    deviation = samples.std(axis=0)
    varies = deviation > 1e-12 * max(float(np.abs(samples).max(initial=0.0)), 1e-300)
    if units < 3 or varies.sum() < 2:
        return np.eye(quantities), 1.0
    scaled = (samples[:, varies] - samples[:, varies].mean(axis=0)) / deviation[varies]
    sample = scaled.T @ scaled / units
    spread = (scaled**2).T @ (scaled**2) / units - sample**2
    others = ~np.eye(len(sample), dtype=bool)
    noise = float(spread[others].sum() / (units - 1))
    intensity = float(np.clip(noise / max(float((sample[others] ** 2).sum()), 1e-300), 0.0, 1.0))
    result = np.eye(quantities)
    result[np.ix_(varies, varies)] = np.where(others, (1.0 - intensity) * sample, 1.0)
    return result, intensity
