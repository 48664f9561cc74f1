"""Cumulative sums of a series: how far it has lately gone up, and down.

Source: E. S. Page, "Continuous inspection schemes", Biometrika 41 (1954) 100-115; head start of
J. M. Lucas and R. B. Crosier, "Fast initial response for CUSUM quality-control schemes",
Technometrics 24 (1982) 199-205.
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def cusum(
    values: FloatArray, reference: float, head_start: float = 0.0
) -> tuple[FloatArray, FloatArray]:
    """Return the upper and the lower sum, both positive.

    Parameters
    ----------
    values
        (points,) deviations from the target; a NaN point leaves the sums as they are.
    reference
        Allowance k taken off at every point: half the shift to be found soonest.
    head_start
        Value both sums start from.

    Returns
    -------
    tuple of FloatArray
        (points,) S+ = max(0, S+ + x - k) and S- = max(0, S- - x - k).
    """
    upper, lower = np.empty(len(values)), np.empty(len(values))
    up = down = head_start
    for at, value in enumerate(values):
        if np.isfinite(value):
            up = max(0.0, up + value - reference)
            down = max(0.0, down - value - reference)
        upper[at], lower[at] = up, down
    return upper, lower


def rise_start(sums: FloatArray, at: int) -> int:
    """Return the first point after a sum was last zero before `at` (Page 1954)."""
    zeros = np.flatnonzero(sums[: at + 1] <= 0.0)
    return int(zeros[-1]) + 1 if zeros.size else 0
