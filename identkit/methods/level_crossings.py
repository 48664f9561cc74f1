"""Every frequency at which a scalar error crosses a level, from one small eigenvalue problem.

|E| = level |N| on the axis where F(s) = level^2 N(s) N(-s) - E(s) E(-s) vanishes. F's zeros are the
eigenvalues of the Hamiltonian matrix of S. Boyd, V. Balakrishnan and P. Kabamba (Mathematics of
Control, Signals and Systems 2, 1989, 207-219). F is even, so it is a function of lambda = s^2 with
half as many zeros (C. F. Van Loan, Linear Algebra and its Applications 61, 1984, 233-251):

    F = constant + Z(s) + Z(-s),  Z = row (sI - A)^{-1} B,  row = D J C + B' Y,  A'Y + YA + C'JC = 0
      = constant + 2 row A (lambda I - A^2)^{-1} B.

The Lyapunov equation is that of the additive decomposition (B. D. O. Anderson, SIAM J. Control 5,
1967, 171-182). N may be smaller than E at infinity: zeros are sought in z = 1/(lambda - shift),
where F is not zero at infinity. Real arithmetic throughout: simple crossings come out exactly real.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_continuous_lyapunov

from identkit.methods.arrays import FloatArray
from identkit.methods.state_space import StateSpace

NEAR_REAL = 1e-4


@dataclass(frozen=True)
class EvenPart:
    """G(s) G(-s) = constant + Z(s) + Z(-s) with Z = row (sI - A)^{-1} B of one scalar G.

    Attributes
    ----------
    row
        (states,)
    constant
        G(infinity)^2.
    """

    row: FloatArray
    constant: float


@dataclass(frozen=True)
class LevelTest:
    """Error E and bound N as two outputs of one system with one input.

    Attributes
    ----------
    A, B
        (states, states), (states,): the common dynamics.
    error, bound
        The even parts of E and N over the common states.
    """

    A: FloatArray
    B: FloatArray
    error: EvenPart
    bound: EvenPart


def even_part(system: StateSpace) -> EvenPart:
    """Return the even part of a scalar system.

    Parameters
    ----------
    system
        One input, one output; no two poles may sum to zero (no poles on the axis).
    """
    if not system.states:
        return EvenPart(np.zeros(0), float(system.D[0, 0] ** 2))
    gramian = solve_continuous_lyapunov(system.A.T, -system.C.T @ system.C)
    row = system.D[0, 0] * system.C[0] + system.B[:, 0] @ gramian
    return EvenPart(row, float(system.D[0, 0] ** 2))


def level_crossings(test: LevelTest, level: float, low: float, high: float) -> FloatArray:
    """Return the angular frequencies in [low, high] at which |E| = level |N|, near misses included.

    Parameters
    ----------
    test
        The pair E, N.
    level
        Positive.
    low, high
        rad/s, 0 < low < high; they also set the scale of the shift.

    Returns
    -------
    FloatArray
        Ascending, rad/s. Zeros within 1e-4 of the axis are reported too: a false hit costs one
        evaluation, a missed one would cost the certificate.
    """
    if not len(test.B):
        return np.zeros(0)
    squared = test.A @ test.A
    row = 2.0 * (level**2 * test.bound.row - test.error.row) @ test.A
    constant = level**2 * test.bound.constant - test.error.constant
    shift, value, solved, reverse = _shifted(squared, test.B, row, constant, low, high)
    zeros = np.linalg.eigvals(np.outer(solved, row @ reverse) / value - reverse)
    with np.errstate(divide="ignore", invalid="ignore"):
        squares = shift + 1.0 / zeros.astype(complex)
    near = (np.abs(squares.imag) <= NEAR_REAL * np.abs(squares)) & (squares.real < 0.0)
    omega = np.sqrt(-squares[near].real)
    return np.unique(omega[(omega > low) & (omega < high)])


def _shifted(
    squared: FloatArray, b: FloatArray, row: FloatArray, constant: float, low: float, high: float
) -> tuple[float, float, FloatArray, FloatArray]:
    """Choose the shift; return it, F there, (shift - A^2)^{-1} B and (shift - A^2)^{-1}.

    Of three shifts inside the band's range the one where F is largest beside its own terms.
    """
    best: tuple[float, float, FloatArray, FloatArray] | None = None
    quality = 0.0
    for shift in np.geomspace(low, high, 5)[1:4] ** 2:
        reverse = np.linalg.inv(shift * np.eye(len(b)) - squared)
        solved = reverse @ b
        value = constant + row @ solved
        size = abs(constant) + np.abs(row) @ np.abs(solved)
        if best is None or abs(value) > quality * size:
            best = (float(shift), float(value), solved, reverse)
            quality = float(abs(value) / size)
        if quality > 1e-3:
            break
    assert best is not None
    return best
