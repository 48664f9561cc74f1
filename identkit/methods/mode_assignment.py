"""Mode assignment: which fitted mode is which mode of the population, or none of them.

Sources: H. W. Kuhn, "The Hungarian method for the assignment problem", Naval Research Logistics
Quarterly 2 (1955) 83-97, and J. Munkres, "Algorithms for the assignment and transportation
problems", Journal of the SIAM 5 (1957) 32-38 (minimum-cost assignment, solved by
scipy.optimize.linear_sum_assignment); K. L. Lange, R. J. A. Little and J. M. G. Taylor, "Robust
statistical modeling using the t distribution", Journal of the American Statistical Association
84 (1989) 881-896 (the bounded growth of the cost of a distance).
"""

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray

UNPAIRED = -1
TAIL = 4.0  # degrees of freedom: six spreads away costs 11.5, not 36


def pairing_cost(distance: FloatArray, widening: FloatArray) -> FloatArray:
    r"""Return the cost of pairing from scaled distances, summed over quantities.

    Twice the negative log likelihood ratio of a Student t (Lange, Little and Taylor 1989)
    against an exact match:

    .. math:: \sum_q (\nu + 1) \ln(1 + d_q^2 / \nu) + 2 \ln w_q

    Parameters
    ----------
    distance
        (..., quantities) difference over its standard deviation (spread and fit error together);
        a NaN quantity is not known and costs nothing.
    widening
        (..., quantities) that standard deviation over the spread alone, at least 1: a poorly
        fitted mode is near everything, and must not win for it.

    Returns
    -------
    FloatArray
        (...,) cost, zero for an exact match without fit error.
    """
    cost = (TAIL + 1.0) * np.log1p(distance**2 / TAIL) + 2.0 * np.log(widening)
    return np.asarray(np.where(np.isnan(cost), 0.0, cost).sum(axis=-1), dtype=float)


def assign_modes(cost: FloatArray, unpaired_cost: float) -> IntArray:
    """Assign fitted modes to population modes at minimum total cost (Kuhn 1955, Munkres 1957).

    Every fitted mode may stay unpaired (extra) and every population mode may stay unpaired
    (missing), at `unpaired_cost` each; so no pair costing more than twice that is ever made.

    Parameters
    ----------
    cost
        (fitted, population) cost of each pair; infinite where a pair is ruled out.
    unpaired_cost
        Cost of one unpaired mode on either side.

    Returns
    -------
    IntArray
        (fitted,) index of the population mode, or -1.

    Notes
    -----
    All pairs of one response are chosen together, so two close modes cannot both take the
    same name and a swap is made only when it lowers the total.
    """
    from scipy.optimize import linear_sum_assignment

    fitted, population = cost.shape
    size = fitted + population
    full = np.full((size, size), unpaired_cost)
    full[fitted:, population:] = 0.0
    limit = 2.0 * unpaired_cost
    full[:fitted, :population] = np.where(cost <= limit, cost, 10.0 * limit * size)
    rows, columns = linear_sum_assignment(full)
    found = np.full(fitted, UNPAIRED, dtype=np.int64)
    for row, column in zip(rows, columns, strict=True):
        if row < fitted and column < population and cost[row, column] <= limit:
            found[row] = column
    return found


def crossing_modes(frequency: FloatArray) -> IntArray:
    """Return the modes that stand in another order than the population's.

    Parameters
    ----------
    frequency
        (modes,) frequencies in the population's order; NaN where a mode was not found.

    Returns
    -------
    IntArray
        Indices of every mode that is in the wrong order against at least one other.
    """
    above = frequency[:, None] > frequency[None, :]
    later = np.arange(len(frequency))[:, None] < np.arange(len(frequency))[None, :]
    wrong = above & later
    return np.flatnonzero(wrong.any(axis=0) | wrong.any(axis=1))
