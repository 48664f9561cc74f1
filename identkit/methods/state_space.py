"""State-space realisations of modal plants, their interconnections and frequency responses.

Realisation in real second-order blocks: W. K. Gawronski, *Advanced Structural Dynamics and Active
Control of Structures*, Springer 2004, ch. 2 (almost balanced modal coordinates). Frequency response
from the Schur form: A. J. Laub, "Efficient multivariable frequency response computations", IEEE
Trans. Automatic Control 26(2), 1981, 407-408 (there with the Hessenberg form).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import block_diag, schur

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import TWO_PI, ModalParameters
from identkit.methods.pade_delay import pade_matrices


@dataclass(frozen=True)
class StateSpace:
    """Continuous-time system x' = A x + B u, y = C x + D u.

    Attributes
    ----------
    A, B, C, D
        (states, states), (states, inputs), (outputs, states), (outputs, inputs); time in s.
    """

    A: FloatArray
    B: FloatArray
    C: FloatArray
    D: FloatArray

    @property
    def states(self) -> int:
        """Number of states."""
        return int(self.A.shape[0])

    def poles(self) -> ComplexArray:
        """Return the eigenvalues of A, rad/s."""
        return np.asarray(np.linalg.eigvals(self.A), dtype=complex)

    def unstable_poles(self) -> int:
        """Return how many poles lie in the open right half-plane.

        A pole on the axis to rounding (a double integrator's) counts as not unstable.
        """
        scale = max(float(np.linalg.norm(self.A, 2)), np.finfo(float).tiny) if self.states else 1.0
        return int(np.sum(self.poles().real > 1e-9 * scale)) if self.states else 0


def modal_realisation(parameters: ModalParameters, delay_order: int = 0) -> StateSpace:
    """Realise a modal plant in real second-order blocks, its delay as an all-pass in series.

    Each block is scaled to equal input and output norms and its states to the mode's own
    frequency, so that kHz modes and residues of 1e8 leave no ill-scaled entries.

    Parameters
    ----------
    parameters
        The plant.
    delay_order
        Order of the Pade all-pass that stands for the delay; 0 leaves the delay out.

    Returns
    -------
    StateSpace
        One input, one output, 2 (modes + base) + delay_order states.
    """
    natural = TWO_PI * parameters.modal_frequency
    rows = zip(
        natural, parameters.damping_ratio, parameters.residue, parameters.residue_rate, strict=True
    )
    blocks = [_second_order(*map(float, row)) for row in rows]
    blocks = _base_blocks(parameters) + blocks
    constant = StateSpace(
        np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.array([[parameters.feedthrough]])
    )
    plant = parallel([*blocks, constant])
    if delay_order and parameters.delay:
        return series(plant, StateSpace(*pade_matrices(parameters.delay, delay_order)))
    return plant


def _base_blocks(parameters: ModalParameters) -> list[StateSpace]:
    if parameters.base == "pivot":
        natural = TWO_PI * parameters.base_frequency
        return [_second_order(natural, parameters.base_damping_ratio, parameters.base_residue, 0.0)]
    if parameters.base == "free":
        lowest = np.min(parameters.modal_frequency, initial=np.inf)
        return [_double_integrator(parameters.base_gain, TWO_PI * min(float(lowest), 1e3))]
    return []


def _second_order(natural: float, damping: float, residue: float, rate: float) -> StateSpace:
    size = float(np.hypot(residue / natural, rate))
    gain = np.sqrt(size) if size > 0.0 else 1.0
    return StateSpace(
        natural * np.array([[0.0, 1.0], [-1.0, -2.0 * damping]]),
        np.array([[0.0], [gain]]),
        np.array([[residue / natural / gain, rate / gain]]),
        np.zeros((1, 1)),
    )


def _double_integrator(base_gain: float, scale: float) -> StateSpace:
    gain = np.sqrt(abs(base_gain) / scale) if base_gain else 1.0
    return StateSpace(
        np.array([[0.0, scale], [0.0, 0.0]]),
        np.array([[0.0], [gain]]),
        np.array([[base_gain / scale / gain, 0.0]]),
        np.zeros((1, 1)),
    )


def parallel(systems: Sequence[StateSpace]) -> StateSpace:
    """Return the sum of systems of equal shape."""
    return StateSpace(
        block_diag(*[system.A for system in systems]),
        np.vstack([system.B for system in systems]),
        np.hstack([system.C for system in systems]),
        np.sum([system.D for system in systems], axis=0),
    )


def series(first: StateSpace, second: StateSpace) -> StateSpace:
    """Return `second` after `first`, that is second(s) first(s)."""
    return StateSpace(
        np.block(
            [
                [first.A, np.zeros((first.states, second.states))],
                [second.B @ first.C, second.A],
            ]
        ),
        np.vstack([first.B, second.B @ first.D]),
        np.hstack([second.D @ first.C, second.C]),
        second.D @ first.D,
    )


def negative(system: StateSpace) -> StateSpace:
    """Return the system with its output's sign changed."""
    return StateSpace(system.A, system.B, -system.C, -system.D)


def inverse(system: StateSpace) -> StateSpace:
    """Return the inverse of a square system whose D is well conditioned.

    Raises
    ------
    numpy.linalg.LinAlgError
        If D is singular: the inverse is improper and has no state-space form.
    """
    gain = np.linalg.inv(system.D)
    return StateSpace(
        system.A - system.B @ gain @ system.C,
        system.B @ gain,
        -gain @ system.C,
        np.asarray(gain, dtype=float),
    )


def frequency_response(system: StateSpace, frequency: FloatArray) -> ComplexArray:
    """Return C (j omega I - A)^{-1} B + D from one Schur form and back substitution.

    Works for defective A (integrators) as well; backward stable.

    Parameters
    ----------
    system
        The system.
    frequency
        (points,) Hz.

    Returns
    -------
    ComplexArray
        (points, outputs, inputs).
    """
    omega = TWO_PI * np.asarray(frequency, dtype=float)
    shape = (omega.size, *system.D.shape)
    if not system.states:
        return np.broadcast_to(system.D.astype(complex), shape).copy()
    triangular, vectors = schur(system.A.astype(complex), output="complex")
    right = vectors.conj().T @ system.B
    left = system.C @ vectors
    state = np.empty((system.states, omega.size, system.B.shape[1]), dtype=complex)
    for row in reversed(range(system.states)):
        known = np.tensordot(triangular[row, row + 1 :], state[row + 1 :], axes=1)
        state[row] = (right[row] + known) / (1j * omega - triangular[row, row])[:, None]
    response = np.moveaxis(np.tensordot(left, state, axes=1), 0, 1) + system.D
    return np.asarray(response.reshape(shape), dtype=complex)
