"""Zeros of a state-space system from the generalised eigenvalues of its system matrix.

A. Emami-Naeini, P. Van Dooren, "Computation of zeros of linear multivariable systems", Automatica
18(4), 1982, 415-430 (here without the reduction: zeros at infinity come out large and are dropped).
"""

import numpy as np
from scipy.linalg import eigvals

from identkit.methods.arrays import ComplexArray
from identkit.methods.state_space import StateSpace


def finite_zeros(system: StateSpace, largest: float) -> ComplexArray:
    """Return the zeros up to `largest` (rad/s) of a square system."""
    states = system.states
    pencil = np.block([[system.A, system.B], [system.C, system.D]])
    mass = np.zeros_like(pencil)
    mass[:states, :states] = np.eye(states)
    numerator, denominator = eigvals(pencil, mass, homogeneous_eigvals=True)
    inside = np.abs(numerator) <= largest * np.abs(denominator)
    return np.asarray(numerator[inside] / denominator[inside], dtype=complex)
