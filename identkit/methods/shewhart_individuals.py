"""Chart of individuals: each point by itself against one limit on either side.

Source: W. A. Shewhart, *Economic Control of Quality of Manufactured Product*, 1931. Points that are
independent and normal make the run length geometric.
"""

import numpy as np
from scipy.stats import norm

from identkit.methods.arrays import FloatArray


def individuals_run_length(limit: float, shift: float = 0.0) -> float:
    """Return the average run length of a two-sided chart.

    Parameters
    ----------
    limit
        In standard deviations.
    shift
        Of the mean, in standard deviations.

    Returns
    -------
    float
        Points up to and including the signal.
    """
    return float(1.0 / (norm.sf(limit - shift) + norm.cdf(-limit - shift)))


def individuals_limit(run_length: float) -> float:
    """Return the limit (standard deviations) whose in-control average run length is as given."""
    return float(norm.isf(0.5 / run_length))


def individuals_survival(limit: float, points: int) -> FloatArray:
    """Return (points + 1,) in-control chance of no signal in the first 0, 1, 2 ... points."""
    return np.asarray((1.0 - 2.0 * norm.sf(limit)) ** np.arange(points + 1), dtype=float)
