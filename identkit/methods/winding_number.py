"""Turns of a sampled curve in the complex plane around zero.

The argument principle for a curve that need not be closed: its continuous change of phase less the
difference of the principal phases of its ends, in whole turns (closing the curve in the slit plane
adds no turn).
"""

import numpy as np

from identkit.methods.arrays import ComplexArray


def turns_around_zero(values: ComplexArray) -> int:
    """Return the whole turns that a curve makes around zero.

    Parameters
    ----------
    values
        (points,) along the curve, not zero, less than half a turn between neighbours.
    """
    phase = np.angle(values)
    whole = np.unwrap(phase)
    return int(np.round((whole[-1] - whole[0] - (phase[-1] - phase[0])) / (2.0 * np.pi)))
