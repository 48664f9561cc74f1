"""Modal plants as functions of complex frequency: values, poles and zeros, delay apart.

Zeros from the generalised eigenvalues of the system matrix (A. Emami-Naeini, P. Van Dooren,
"Computation of zeros of linear multivariable systems", Automatica 18(4), 1982, 415-430), settled by
Newton steps on the sum itself, which is accurate where a realisation is not.
"""

from dataclasses import replace

import numpy as np
from scipy.linalg import eigvals

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import TWO_PI, ModalParameters
from identkit.methods.state_space import modal_realisation

NEWTON_STEPS = 4


def modal_value(s: ComplexArray, parameters: ModalParameters) -> ComplexArray:
    """Return the plant without its delay at complex frequencies `s` (points,), rad/s."""
    return _value_and_slope(np.asarray(s, dtype=complex), parameters)[0]


def modal_poles(parameters: ModalParameters) -> ComplexArray:
    """Return the poles, rad/s; the two at rest of a free base are left out."""
    natural, damping = _modes(parameters)[:2]
    root = np.sqrt(damping**2 - 1.0 + 0j)
    fast = natural * (-damping - np.where(damping < 0.0, -root, root))
    # The slow one of an overdamped pair is natural^2 over the fast one: no cancellation.
    return np.concatenate([fast, natural**2 / fast])


def modal_zeros(parameters: ModalParameters) -> ComplexArray:
    """Return the zeros, rad/s, as many as the realisation has states; inf for those at infinity."""
    plain = replace(parameters, delay=0.0)
    system = modal_realisation(plain)
    states = system.states
    pencil = np.block([[system.A, system.B], [system.C, system.D]])
    mass = np.zeros_like(pencil)
    mass[:states, :states] = np.eye(states)
    above, below = eigvals(pencil, mass, homogeneous_eigvals=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        zeros = np.where(below == 0.0, np.inf, above / below)
    # One eigenvalue of the pencil is always infinite.
    zeros = zeros[np.argsort(np.abs(zeros))][:states]
    return np.asarray([_settled(zero, plain) for zero in zeros], dtype=complex)


def _settled(zero: complex, parameters: ModalParameters) -> complex:
    if not np.isfinite(zero) or abs(zero) == 0.0:
        return zero
    at = zero
    for _ in range(NEWTON_STEPS):
        # A zero that cancels a pole exactly has no value to settle by.
        with np.errstate(divide="ignore", invalid="ignore"):
            value, slope = _value_and_slope(np.array([at]), parameters)
        if not np.isfinite(value[0]) or not np.isfinite(slope[0]):
            return zero
        if slope[0] == 0.0 or abs(value[0]) > 0.01 * abs(slope[0] * at):
            return zero
        at = at - complex(value[0] / slope[0])
    return at if abs(at - zero) < 0.01 * abs(zero) else zero


def _value_and_slope(
    s: ComplexArray, parameters: ModalParameters
) -> tuple[ComplexArray, ComplexArray]:
    natural, damping, residue, rate = _modes(parameters)
    column = s[:, None]
    below = natural**2 + column * (2.0 * damping * natural) + column**2
    above = residue + column * rate
    value = (above / below).sum(axis=1) + parameters.feedthrough
    slope = ((rate - above * (2.0 * damping * natural + 2.0 * column) / below) / below).sum(axis=1)
    if parameters.base == "free":
        value = value + parameters.base_gain / s**2
        slope = slope - 2.0 * parameters.base_gain / s**3
    return np.asarray(value, dtype=complex), np.asarray(slope, dtype=complex)


def _modes(
    parameters: ModalParameters,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    columns = (
        TWO_PI * parameters.modal_frequency,
        parameters.damping_ratio,
        parameters.residue,
        parameters.residue_rate,
    )
    if parameters.base != "pivot":
        return columns
    base = (
        TWO_PI * parameters.base_frequency,
        parameters.base_damping_ratio,
        parameters.base_residue,
        0.0,
    )
    joined = [np.append(column, value) for column, value in zip(columns, base, strict=True)]
    return joined[0], joined[1], joined[2], joined[3]
