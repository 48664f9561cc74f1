"""Run length of the two-sided EWMA chart, from its integral equation.

Source: S. V. Crowder, "A simple method for studying run-length distributions of exponentially
weighted moving average charts", Technometrics 29 (1987) 401-407. Zero state, asymptotic limits
(J. M. Lucas and M. S. Saccucci, Technometrics 32 (1990) 1-12). Independent normal points.
"""

import functools

from scipy.stats import norm

from identkit.methods.absorbing_chain import AbsorbingChain, legendre_nodes, solve_limit
from identkit.methods.ewma_chart import ewma_deviation

_LEAST_LIMIT = 0.5
_FIRST_HIGH = 3.5


def ewma_chain(weight: float, limit: float, shift: float = 0.0, nodes: int = 0) -> AbsorbingChain:
    """Return the chain of a chart that signals when |z| exceeds limit x its deviation.

    Parameters
    ----------
    weight
        Of the newest point.
    limit
        In asymptotic standard deviations of z.
    shift
        Of the mean of the points, in their standard deviations.
    nodes
        Quadrature nodes; enough for ten digits by default.
    """
    edge = limit * ewma_deviation(weight)
    # A point moves z by a kernel of width `weight`: the nodes must resolve it.
    z, measure = legendre_nodes(-edge, edge, nodes or int(40 + 6.0 * edge / weight))
    step = (z[None, :] - (1.0 - weight) * z[:, None]) / weight - shift
    between = norm.pdf(step) * measure / weight
    first = norm.pdf(z / weight - shift) * measure / weight
    return AbsorbingChain(first, between)


def ewma_run_length(weight: float, limit: float, shift: float = 0.0) -> float:
    """Return the average run length in points; arguments as in `ewma_chain`."""
    return ewma_chain(weight, limit, shift).average()


@functools.lru_cache(maxsize=256)
def ewma_limit(weight: float, run_length: float) -> float:
    """Return the limit, in asymptotic deviations of z, of a given in-control run length."""
    return solve_limit(
        lambda limit: ewma_run_length(weight, limit), run_length, _LEAST_LIMIT, _FIRST_HIGH
    )
