"""In-control run length of the multivariate EWMA chart, from a radial integral equation.

Sources: S. E. Rigdon, "An integral equation for the in-control average run length of a multivariate
exponentially weighted moving average control chart", Journal of Statistical Computation and
Simulation 52 (1995) 351-365; S. S. Prabhu and G. C. Runger, "Designing a multivariate EWMA control
chart", Journal of Quality Technology 29 (1997) 8-15 (limits). In control only the length of the
average matters: its square is noncentral chi-square given the last one. Asymptotic covariance,
zero state, independent normal points.
"""

import functools

import numpy as np
from scipy.special import gammaln, ive

from identkit.methods.absorbing_chain import AbsorbingChain, legendre_nodes, solve_limit
from identkit.methods.arrays import FloatArray


def multivariate_ewma_chain(series: int, weight: float, limit: float) -> AbsorbingChain:
    """Return the chain of a chart that signals when T2 exceeds `limit`.

    Parameters
    ----------
    series
        Number of series averaged together.
    weight
        Of the newest point.
    limit
        Of T2 with the asymptotic covariance.
    """
    edge = np.sqrt(limit * weight / (2.0 - weight))
    radius, measure = legendre_nodes(0.0, edge, int(24 + 3.0 * edge / weight))
    square = (radius / weight) ** 2
    slope = 2.0 * radius / weight**2 * measure
    before = ((1.0 - weight) * np.append(radius, 0.0) / weight) ** 2
    rows = _noncentral_density(square[None, :], series, before[:, None]) * slope
    return AbsorbingChain(rows[-1], rows[:-1])


def _noncentral_density(square: FloatArray, freedom: int, distance: FloatArray) -> FloatArray:
    """Return the density of noncentral chi-square; at distance 0 that of chi-square."""
    order = 0.5 * freedom - 1.0
    product = np.sqrt(square * distance)
    # I_v(x) = ive(v, x) e^x, and its leading power where x is too small for the quotient.
    small = product < 1e-8
    bessel = np.log(ive(order, np.where(small, 1.0, product))) + product
    ahead = np.where(
        small,
        order * np.log(0.5 * square) - gammaln(order + 1.0),
        bessel + 0.5 * order * np.log(square / np.where(small, 1.0, distance)),
    )
    return np.asarray(0.5 * np.exp(ahead - 0.5 * (square + distance)))


def multivariate_ewma_run_length(series: int, weight: float, limit: float) -> float:
    """Return the in-control average run length in points."""
    return multivariate_ewma_chain(series, weight, limit).average()


@functools.lru_cache(maxsize=256)
def multivariate_ewma_limit(series: int, weight: float, run_length: float) -> float:
    """Return the limit of T2 of a given in-control average run length."""
    return solve_limit(
        lambda limit: multivariate_ewma_run_length(series, weight, limit),
        run_length,
        0.2 * series,
        2.0 * series + 10.0,
    )
