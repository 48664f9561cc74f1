r"""What deviations a population may really have, given those estimated from few units.

.. math:: \sigma_c^2 = \max\Bigl(\frac{\nu\,(\hat\sigma_c^2 + s_c)}{\chi^2_\nu} - s_c,\ 0\Bigr)

with s_c the variance that everything below component c adds to the means it is estimated from, and
nu their degrees of freedom: the fiducial law of a component of a balanced nested design. The
chi-squares of correlated quantities come from one Wishart matrix.

Sources: F. E. Satterthwaite, "An approximate distribution of estimates of variance components",
Biometrics Bulletin 2 (1946) 110-114; J. Wishart, "The generalised product moment distribution in
samples from a normal multivariate population", Biometrika 20A (1928) 32-52.
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def drawn_variances(
    estimate: FloatArray,
    below: FloatArray,
    freedom: int,
    chi_square: FloatArray,
) -> FloatArray:
    """Return one draw of the variances of many quantities (Satterthwaite 1946).

    Parameters
    ----------
    estimate
        (quantities,) estimated variances of one component, at least 0.
    below
        (quantities,) variance that the components below it and the measurement add to the means.
    freedom
        Degrees of freedom of those means; with none, the estimate is returned.
    chi_square
        (quantities,) draws of chi-square with `freedom` degrees.
    """
    if freedom < 1:
        return np.asarray(estimate, dtype=float)
    total = freedom * (estimate + below) / chi_square
    return np.asarray(np.maximum(total - below, 0.0), dtype=float)


def drawn_correlation(
    correlation: FloatArray, freedom: int, kept: float, generator: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return a draw of a correlation and the chi-squares that go with it (Wishart 1928).

    Parameters
    ----------
    correlation
        (quantities, quantities) positive definite.
    freedom
        Degrees of freedom of the sample it was estimated from, at least 1.
    kept
        Share of the sample's own correlation in the estimate, 0 to 1; the rest was shrunk away
        and does not scatter.
    generator
        Source of the draw.

    Returns
    -------
    tuple
        (quantities, quantities) positive definite correlation, and (quantities,) chi-squares.
    """
    root = np.linalg.cholesky(correlation)
    sample = generator.standard_normal((freedom, len(root))) @ root.T
    product = sample.T @ sample
    size = np.sqrt(np.diag(product))
    drawn = kept * product / np.outer(size, size) + (1.0 - kept) * correlation
    # A sample of fewer than quantities is singular by itself; a trace of the estimate mends it.
    drawn = (1.0 - 1e-6) * drawn + 1e-6 * np.eye(len(root))
    return drawn, np.asarray(size**2, dtype=float)
