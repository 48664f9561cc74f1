"""Which group of units stands apart from all others (Student 1908), over many quantities at once.

"Student", "The probable error of a mean", Biometrika 6, 1908, for two samples of one variance: with
lots of half a dozen units the tails of Welch's test are too generous for a table of comparisons.
The probabilities are multiplied by the number of comparisons (C. E. Bonferroni, 1936), so that one
false claim in the whole table has the stated chance.
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray

FEWEST = 3


def group_contrast(values: FloatArray, member: BoolArray) -> FloatArray:
    """Return the probability that chance alone sets a group this far from the others.

    Parameters
    ----------
    values
        (units, quantities).
    member
        (groups, units), whether a unit belongs to a group.

    Returns
    -------
    FloatArray
        (groups, quantities) probabilities for the whole table; NaN where fewer than three units
        stand on either side or a quantity does not vary.

    Notes
    -----
    Units must be independent draws; a quantity that is shrunk towards its mean (a prediction of a
    random effect) makes the test cautious.
    """
    # needed here only, and slow to import
    from scipy.stats import ttest_ind

    result = np.full((len(member), values.shape[1]), np.nan)
    for row, mine in enumerate(member):
        if min(mine.sum(), (~mine).sum()) < FEWEST:
            continue
        varies = np.minimum(np.ptp(values[mine], axis=0), np.ptp(values[~mine], axis=0)) > 0.0
        tested = ttest_ind(values[mine][:, varies], values[~mine][:, varies], equal_var=True)
        result[row, varies] = tested.pvalue
    return np.asarray(np.minimum(result * np.isfinite(result).sum(), 1.0), dtype=float)
