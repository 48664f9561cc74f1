"""Points of a baseline that do not belong to the rest, found from a clean core outward.

Sources: P. J. Rousseeuw, "Least median of squares regression", Journal of the American Statistical
Association 79 (1984) 871-880 (the shortest half as the core); N. Billor, A. S. Hadi and P. F.
Velleman, "BACON: blocked adaptive computationally efficient outlier nominators", Computational
Statistics and Data Analysis 34 (2000) 279-298. The core grows by every point that its own members
cannot tell from themselves. Meant for single points that are off, not for a large part of the
baseline.
"""

import numpy as np
from scipy.stats import norm

from identkit.methods.arrays import BoolArray, FloatArray
from identkit.methods.recursive_residuals import baseline_scores

_MOST_ROUNDS = 30
_LEAST_POINTS = 8
_HALF_DEVIATION = 0.3778  # of the middle half of a normal population, over that of the whole


def clean_baseline(
    values: FloatArray, relative_variance: FloatArray, false_alarm: float = 0.05
) -> BoolArray:
    """Return which points belong together.

    Parameters
    ----------
    values
        (points,) NaN points never belong.
    relative_variance
        (points,) known ratio of each point's variance to a common one.
    false_alarm
        Chance that any point of a clean normal baseline is left out.

    Returns
    -------
    BoolArray
        (points,) at least half of the finite points; all of them where there are fewer than
        eight, too few to tell.
    """
    known = np.isfinite(values)
    count = int(known.sum())
    if count < _LEAST_POINTS:
        return np.asarray(known)
    limit = float(norm.isf(0.5 * false_alarm / count))
    core = _shortest_half(values)
    ones = np.ones((len(values), 1))
    members = core
    for turn in range(_MOST_ROUNDS):
        # Half of a normal sample around its middle looks much tighter than the whole.
        widening = 1.0 if turn else 1.0 / _HALF_DEVIATION
        scores = baseline_scores(values, ones, relative_variance, members, widening)
        grown = np.isfinite(scores) & (np.abs(scores) <= limit)
        if grown.sum() < core.sum() or np.array_equal(grown, members):
            break
        members = grown
    return np.asarray(members, dtype=bool)


def _shortest_half(values: FloatArray) -> BoolArray:
    """Return the points between the two ends of the shortest interval that holds half of them."""
    ordered = np.sort(values[np.isfinite(values)])
    half = len(ordered) // 2 + 1
    start = int(np.argmin(ordered[half - 1 :] - ordered[: len(ordered) - half + 1]))
    inside = (values >= ordered[start]) & (values <= ordered[start + half - 1])
    return np.asarray(inside, dtype=bool)
