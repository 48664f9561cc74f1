"""Check, without trusting a solver, that a set of linear inequalities has no solution.

Source: J. Farkas, "Theorie der einfachen Ungleichungen", J. reine angew. Math. 124, 1-27, 1902:
A c <= 0 with b'c = 1 has no solution if some y >= 0 gives A'y = eta b with eta > 0. With rounded
multipliers A'y = eta b + e, and the argument still holds for all c of bounded size as long as the
remainder e cannot make up for eta.
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def proves_infeasible(
    rows: FloatArray, normal: FloatArray, multipliers: FloatArray, largest: FloatArray
) -> bool:
    """Tell whether the multipliers prove that rows @ c <= 0, normal @ c = 1 has no solution.

    Parameters
    ----------
    rows
        (inequalities, unknowns) matrix A.
    normal
        (unknowns,) vector b.
    multipliers
        (inequalities,) claimed y; negative entries count as zero.
    largest
        (unknowns,) bound on |c| of every solution, entry by entry.
    """
    from scipy.optimize import nnls

    support = multipliers > 0.0
    try:
        y = nnls(rows[support].T, normal)[0]
    except RuntimeError:  # its iterations ran out: nothing is proven
        return False
    remainder = np.abs(rows[support].T @ y - normal)
    rounding = 4.0 * np.finfo(float).eps * (np.abs(rows[support]).T @ y) * y.size**0.5
    return bool(float((remainder + rounding) @ largest) < 1.0)
