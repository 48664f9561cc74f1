"""Delay by scanning: the data are turned by each trial delay, the columns stay.

A turn by e^{+j w delay} keeps distances, so the cost of every trial delay follows from one
factorisation and one matrix product.

Source: the rotation is elementary; the projection is G. H. Golub & V. Pereyra, SIAM J. Numer.
Anal. 10 (1973) 413-432.
"""

import numpy as np
from scipy.linalg import solve_triangular

from identkit.methods.arrays import FloatArray
from identkit.methods.modal_problem import ScaledData, as_reals, scaled_factor

STEP = 0.5
LOWEST, HIGHEST = -1.0, 40.0


def scan_delay(data: ScaledData, rows: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return trial delays (trials,), in units of 1/reference, and the cost (trials,) of each.

    Parameters
    ----------
    data
        Dimensionless weighted response.
    rows
        (columns, 2F) columns whose best combination is to match the turned data.
    """
    delays = np.arange(LOWEST, HIGHEST, STEP)
    turned = np.empty((delays.size, data.x.size), dtype=complex)
    turned[0] = data.target * np.exp(1j * delays[0] * data.x)
    turn = np.exp(1j * STEP * data.x)
    for k in range(1, delays.size):
        np.multiply(turned[k - 1], turn, out=turned[k])
    factor, scale = scaled_factor(rows @ rows.T)
    explained = solve_triangular(
        factor, (rows @ as_reals(turned).T) * scale[:, None], lower=True, check_finite=False
    )
    energy = float(np.sum(np.abs(data.target) ** 2))
    return delays, np.asarray(energy - np.sum(explained**2, axis=0), dtype=float)
