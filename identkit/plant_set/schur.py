"""Fast frequency response of one system at many points, its poles and its zeros.

A is balanced and brought to complex Schur form once; each point then costs one back substitution.
Source: A. J. Laub, "Efficient multivariable frequency response computations", IEEE Trans. Automat.
Contr. 26(2), 1981, with the Schur in place of the Hessenberg form.
"""

import numpy as np
from scipy import linalg

from identkit.plant_set.fields import ComplexArray, FittedPlant, FloatArray, Matrices
from identkit.plant_set.response import TWO_PI, balance

_POINTS_AT_ONCE = 20_000
_FAR = 1e4


class SchurResponse:
    """The frequency response of a system, ready for many points.

    Parameters
    ----------
    matrices
        The system.
    """

    def __init__(self, matrices: Matrices) -> None:
        even = balance(matrices)
        self._upper, unitary = linalg.schur(even.A.astype(complex), output="complex")
        self._driven = unitary.conj().T @ even.B
        self._seen = even.C @ unitary
        self._feed = even.D

    @property
    def poles(self) -> ComplexArray:
        """(states,) eigenvalues of A."""
        return np.asarray(np.diag(self._upper))

    def __call__(self, points: ComplexArray) -> ComplexArray:
        """Return (points, outputs, inputs) at complex points s."""
        result = np.empty((points.size, *self._feed.shape), dtype=complex)
        for start in range(0, points.size, _POINTS_AT_ONCE):
            some = slice(start, start + _POINTS_AT_ONCE)
            result[some] = self._evaluate(points[some])
        return result

    def _evaluate(self, points: ComplexArray) -> ComplexArray:
        states, inputs = self._driven.shape
        inner = np.empty((states, inputs * points.size), dtype=complex)
        for row in range(states - 1, -1, -1):
            above = (self._upper[row, row + 1 :] @ inner[row + 1 :]).reshape(inputs, points.size)
            solved = (self._driven[row][:, None] + above) / (points - self._upper[row, row])
            inner[row] = solved.ravel()
        seen = (self._seen @ inner).reshape(-1, inputs, points.size)
        return np.asarray(np.moveaxis(seen, -1, 0) + self._feed)


def zeros(matrices: Matrices, reach: float) -> ComplexArray:
    """Return the finite zeros of a square system up to about `reach` rad/s.

    They are the generalised eigenvalues of the system pencil (A. Emami-Naeini and P. Van Dooren,
    Automatica 18(4), 1982, state the problem). Other shapes have none in general.
    """
    outputs, inputs = matrices.D.shape
    if outputs != inputs or matrices.states == 0:
        return np.zeros(0, dtype=complex)
    even = balance(matrices)
    pencil = np.block([[even.A, even.B], [even.C, even.D]])
    shift = np.zeros_like(pencil)
    shift[: even.states, : even.states] = np.eye(even.states)
    top, bottom = linalg.eigvals(pencil, shift, homogeneous_eigvals=True)
    finite = np.abs(top) < _FAR * reach * np.abs(bottom)
    return np.asarray(top[finite] / bottom[finite])


def plant_poles(plant: FittedPlant) -> ComplexArray:
    """Return the poles of a fitted plant, its base included, rad/s."""
    natural, ratio = TWO_PI * plant.modal_frequency, plant.damping_ratio
    if plant.base == "pivot":
        natural = np.append(natural, TWO_PI * plant.base_frequency)
        ratio = np.append(ratio, plant.base_damping_ratio)
    root = natural * np.sqrt(np.asarray(ratio**2 - 1.0, dtype=complex))
    poles = np.concatenate([-ratio * natural + root, -ratio * natural - root])
    return np.append(poles, [0.0, 0.0]) if plant.base == "free" else poles


def plant_matrices(plant: FittedPlant) -> Matrices:
    """Return a state space of a scalar fitted plant without its delay."""
    terms = [
        (TWO_PI * hertz, ratio, float(top[0, 0]), float(rate[0, 0]))
        for hertz, ratio, top, rate in zip(
            plant.modal_frequency,
            plant.damping_ratio,
            plant.residue,
            plant.residue_rate,
            strict=True,
        )
    ]
    if plant.base == "pivot":
        natural = TWO_PI * plant.base_frequency
        residue = float(plant.base_residue[0, 0])
        terms.append((natural, plant.base_damping_ratio, residue, 0.0))
    if plant.base == "free":
        terms.append((0.0, 0.0, float(plant.base_gain[0, 0]), 0.0))
    return _terms(terms, plant.feedthrough)


def _terms(terms: list[tuple[float, float, float, float]], feed: FloatArray) -> Matrices:
    size = 2 * len(terms)
    drift, driven, seen = np.zeros((size, size)), np.zeros((size, 1)), np.zeros((1, size))
    for k, (natural, ratio, residue, rate) in enumerate(terms):
        # States of equal size: x1' = w x2, x2' = -w x1 - 2 zeta w x2 + u; free base: w = 1.
        unit = natural if natural > 0.0 else 1.0
        drift[2 * k, 2 * k + 1] = unit
        drift[2 * k + 1, 2 * k] = -(natural**2) / unit
        drift[2 * k + 1, 2 * k + 1] = -2.0 * ratio * natural
        driven[2 * k + 1, 0] = 1.0
        seen[0, 2 * k], seen[0, 2 * k + 1] = residue / unit, rate
    return Matrices(drift, driven, seen, feed)
