"""Run length of the CUSUM chart, from its integral equation.

Sources: E. S. Page, "Continuous inspection schemes", Biometrika 41 (1954) 100-115 (equation, with
an atom at zero); K. W. Kemp, "The use of cumulative sums for sampling inspection schemes", Applied
Statistics 11 (1962) 16-31 (two sides from one); J. M. Lucas and R. B. Crosier, Technometrics 24
(1982) 199-205 (two sides with a head start); D. Siegmund, *Sequential Analysis*, 1985
(approximation). Independent normal points.
"""

import functools

import numpy as np
from scipy.stats import norm

from identkit.methods.absorbing_chain import AbsorbingChain, legendre_nodes, solve_limit
from identkit.methods.arrays import FloatArray

_OVERSHOOT = 1.166  # twice the mean excess over the boundary, Siegmund 1985
_LEAST_LIMIT = 0.05


def cusum_chain(
    reference: float, limit: float, shift: float = 0.0, head_start: float = 0.0
) -> AbsorbingChain:
    """Return the chain of the upper sum, which signals above `limit`.

    Parameters
    ----------
    reference, limit, head_start
        Allowance k, limit h and first value, in standard deviations of a point.
    shift
        Of the mean of the points, in their standard deviations.
    """
    nodes, measure = legendre_nodes(0.0, limit, int(30 + 5 * limit))
    states = np.concatenate([[0.0], nodes])

    def onward(start: FloatArray) -> FloatArray:
        ahead = states[None, :] - start[:, None] + reference - shift
        rows = norm.pdf(ahead)
        rows[:, 1:] *= measure
        rows[:, 0] = norm.cdf(ahead[:, 0])
        return np.asarray(rows, dtype=float)

    return AbsorbingChain(onward(np.array([head_start]))[0], onward(states))


def one_sided_run_length(
    reference: float, limit: float, shift: float = 0.0, head_start: float = 0.0
) -> float:
    """Return the average run length of the upper sum; arguments as in `cusum_chain`."""
    return cusum_chain(reference, limit, shift, head_start).average()


def cusum_run_length(
    reference: float, limit: float, shift: float = 0.0, head_start: float = 0.0
) -> float:
    """Return the average run length of both sums together, in points.

    Without a head start 1/L = 1/L+ + 1/L- (Kemp 1962); with one, both start from it and Lucas and
    Crosier (1982) combine four one-sided run lengths.
    """
    up, down = (one_sided_run_length(reference, limit, s) for s in (shift, -shift))
    if head_start == 0.0:
        return up * down / (up + down)
    up_ahead, down_ahead = (
        one_sided_run_length(reference, limit, s, head_start) for s in (shift, -shift)
    )
    return (up_ahead * down + down_ahead * up - up * down) / (up + down)


@functools.lru_cache(maxsize=256)
def cusum_limit(reference: float, run_length: float) -> float:
    """Return the limit h, in standard deviations of a point, of a given in-control run length."""
    high = max(1.0, 1.3 * np.log(max(run_length, 3.0)) / (2.0 * reference))
    return solve_limit(
        lambda limit: cusum_run_length(reference, limit), run_length, _LEAST_LIMIT, high
    )


def siegmund_run_length(reference: float, limit: float, shift: float = 0.0) -> float:
    """Return Siegmund's (1985) approximation to the average run length of the upper sum.

    Not used for limits: at k = 0.5, h = 5 it gives 938.2 for the exact 930.9.
    """
    drift, height = shift - reference, limit + _OVERSHOOT
    if drift == 0.0:
        return height**2
    return float(np.expm1(-2.0 * drift * height) + 2.0 * drift * height) / (2.0 * drift**2)
