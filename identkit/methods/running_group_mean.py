"""The mean of a production lot so far against everything made before the lot.

Sources: Student (W. S. Gosset), "The probable error of a mean", Biometrika 6 (1908) 1-25; W. A.
Shewhart, *Economic Control of Quality of Manufactured Product*, 1931 (rational subgroups). A lot
that stands apart moves all its points together, so their mean tells it long before a single one
does. Independent normal points with known ratios of their variances.
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.recursive_residuals import normal_score


def running_group_scores(
    values: FloatArray,
    relative_variance: FloatArray,
    groups: IntArray,
    reference: BoolArray,
    watched: BoolArray,
    inflation: float = 1.0,
) -> FloatArray:
    """Return at every watched point the normal score of its group's mean so far.

    Parameters
    ----------
    values, relative_variance
        (points,) in order; ratio of each point's variance to a common unknown one.
    groups
        (points,) number of each point's group; negative for none.
    reference
        (points,) points that may serve as reference: those before the group's first watched point
        that belong to other groups, or stand before the watch.
    watched
        (points,) points to be judged.
    inflation
        Variance of a mean over that of a mean of independent points.

    Returns
    -------
    FloatArray
        (points,) standard normal in control at every point, not independent along a group; NaN
        where the reference has fewer than three points.
    """
    scores = np.full(len(values), np.nan)
    usable = np.isfinite(values)
    weight = np.where(usable, 1.0 / relative_variance, 0.0)
    for group in np.unique(groups[watched & usable & (groups >= 0)]):
        mine = np.flatnonzero(watched & usable & (groups == group))
        before = np.flatnonzero(reference & usable)
        before = before[before < mine[0]]
        if len(before) < 3:
            continue
        total = float(weight[before].sum())
        mean = float(weight[before] @ values[before]) / total
        square = float(weight[before] @ (values[before] - mean) ** 2) / (len(before) - 1)
        so_far = np.cumsum(weight[mine])
        step = np.cumsum(weight[mine] * values[mine]) / so_far - mean
        ratio = step / np.sqrt(max(square, np.finfo(float).tiny) * (1.0 / so_far + 1.0 / total))
        scores[mine] = [normal_score(float(r), len(before) - 1) for r in ratio / np.sqrt(inflation)]
    return scores
