"""Closing a loop around a state-space system, and the map that keeps stability and norms.

Lower linear fractional transformation: K. Zhou, J. C. Doyle, K. Glover, *Robust and Optimal
Control*, Prentice Hall 1996, section 10.4. Bilinear map between z and s, which keeps stability and
the norm: K. Glover, "All optimal Hankel-norm approximations of linear multivariable systems and
their L-infinity error bounds", Int. J. Control 39(6), 1984, 1115-1193 (discrete-time systems).
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import TWO_PI
from identkit.methods.state_space import StateSpace, inverse, parallel

AXIS = 1e-9


def close_lower(around: StateSpace, controller: StateSpace) -> StateSpace:
    """Close u = -K y around the last inputs u and outputs y of a system.

    Parameters
    ----------
    around
        Inputs [w, u], outputs [z, y]; w and z may be empty.
    controller
        K, from y to -u.

    Returns
    -------
    StateSpace
        From w to z; states of `around`, then of `controller`.

    Raises
    ------
    numpy.linalg.LinAlgError
        If I + D_K D_22 is singular: the loop is not well posed.
    """
    rows, columns = around.D.shape[0] - controller.D.shape[1], controller.D.shape[0]
    free = around.D.shape[1] - columns
    b1, b2 = around.B[:, :free], around.B[:, free:]
    c1, c2 = around.C[:rows], around.C[rows:]
    d11, d12 = around.D[:rows, :free], around.D[:rows, free:]
    d21, d22 = around.D[rows:, :free], around.D[rows:, free:]
    loop = -np.linalg.inv(np.eye(columns) + controller.D @ d22)
    u_x, u_k, u_w = loop @ controller.D @ c2, loop @ controller.C, loop @ controller.D @ d21
    y_x, y_k, y_w = c2 + d22 @ u_x, d22 @ u_k, d21 + d22 @ u_w
    return StateSpace(
        np.block(
            [
                [around.A + b2 @ u_x, b2 @ u_k],
                [controller.B @ y_x, controller.A + controller.B @ y_k],
            ]
        ),
        np.vstack([b1 + b2 @ u_w, controller.B @ y_w]),
        np.hstack([c1 + d12 @ u_x, d12 @ u_k]),
        d11 + d12 @ u_w,
    )


def closed_loop_poles(plant: StateSpace, controller: StateSpace) -> ComplexArray:
    """Return the poles (rad/s) of a plant under u = -K y, all states counted."""
    return close_lower(plant, controller).poles()


def is_stable(poles: ComplexArray) -> bool:
    """Say whether all poles lie left of the imaginary axis; one on it to rounding does not."""
    return bool(np.all(poles.real < -AXIS * np.abs(poles)))


def sensitivity(loop: StateSpace) -> StateSpace:
    """Return 1/(1 + L) of a scalar loop.

    Raises
    ------
    numpy.linalg.LinAlgError
        If 1 + L is zero at infinite frequency.
    """
    none = np.zeros((0, 0))
    one = StateSpace(none, np.zeros((0, 1)), np.zeros((1, 0)), np.ones((1, 1)))
    return inverse(parallel([one, loop]))


def sampled_to_continuous(system: StateSpace, period: float) -> StateSpace:
    """Map z = (1 + s period/2)/(1 - s period/2): stability and norm stay, frequencies bend.

    Parameters
    ----------
    system
        In z, without a pole at z = -1.
    period
        s.
    """
    size = np.eye(system.states)
    back = np.linalg.inv(system.A + size)
    root = np.sqrt(period)
    return StateSpace(
        (2.0 / period) * (system.A - size) @ back,
        (2.0 / root) * back @ system.B,
        (2.0 / root) * system.C @ back,
        system.D - system.C @ back @ system.B,
    )


def bent(frequency: FloatArray, period: float) -> FloatArray:
    """Return where the bilinear map puts the frequencies (Hz) of a system sampled at `period`."""
    if period <= 0.0:
        return np.asarray(frequency, dtype=float)
    return np.asarray(np.tan(0.5 * TWO_PI * np.asarray(frequency) * period) / (np.pi * period))


def straightened(frequency: FloatArray, period: float) -> FloatArray:
    """Return the sampled system's frequencies (Hz) from those of its bilinear image."""
    if period <= 0.0:
        return np.asarray(frequency, dtype=float)
    return np.asarray(np.arctan(np.pi * np.asarray(frequency) * period) / (np.pi * period))
