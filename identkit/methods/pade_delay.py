"""Rational all-pass in place of a delay: the diagonal Pade approximant of e^{-s tau}.

The approximant is e^{-2x} ~ (Y - 1)/(Y + 1), x = s tau / 2, with Y the continued fraction of coth
x cut after `order` terms: coth x = 1/x + 1/(3/x + 1/(5/x + ...)) (J. H. Lambert 1761; O. Perron,
*Die Lehre von den Kettenbruechen*, 1913). Read as a lossless ladder it gives a real, balanced
state-space form without a single large number, unlike the companion form.
Source of the approximant: G. A. Baker, P. Graves-Morris, *Pade Approximants*, 2nd ed., 1996, ch. 1.
"""

from functools import cache

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

HIGHEST_ORDER = 40


def pade_matrices(
    delay: float, order: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return A, B, C, D of the Pade all-pass of a delay.

    Parameters
    ----------
    delay
        s; negative for an advance (the result is then unstable).
    order
        Number of states, at least 1.

    Returns
    -------
    tuple of FloatArray
        A (order, order) and B (order, 1) in 1/s scaled by 1/sqrt(delay), C (1, order), D (1, 1).
    """
    a, b, c, d = _unit_ladder(order)
    root = np.sqrt(abs(delay))
    return a / delay, b * (np.sign(delay) / root), c / root, d


@cache
def _unit_ladder(order: int) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Realise the approximant of e^{-s}: through and across variables of the ladder in turn.

    Element k obeys x_k' = 2 (2k - 1) e_k, e_{k-1} = x_k + e_{k+1}, e_{order+1} = 0, e_0 + e_1 = 2u,
    output e_0 - u; each e is written as a row of coefficients of (x, u).
    """
    rows = np.zeros((order + 2, order + 1))
    for k in range(order - 1, -1, -2):
        rows[k] = rows[k + 2] if k + 2 <= order else 0.0
        rows[k, k] += 1.0
    known = (order - 1) % 2
    rows[1 - known] = -rows[known]
    rows[1 - known, order] += 2.0
    for k in range(1 - known, order - 1, 2):
        rows[k + 2] = rows[k]
        rows[k + 2, k] -= 1.0
    weight = 2.0 * (2.0 * np.arange(1, order + 1) - 1.0)
    scale = np.sqrt(weight)
    change = rows[1 : order + 1] * scale[:, None]
    output = rows[0].copy()
    output[order] -= 1.0
    a = change[:, :order] * scale
    b = change[:, order:] / np.sqrt(2.0)
    return a, b, (output[:order] * scale)[None, :] * np.sqrt(2.0), output[None, order:]


def pade_response(phase: FloatArray, order: int) -> ComplexArray:
    """Return the approximant at s tau = j phase; its modulus is 1 exactly.

    Parameters
    ----------
    phase
        omega tau, rad, any shape.
    order
        Order of the approximant; 0 gives 1.
    """
    return np.asarray(np.exp(-1j * pade_phase(phase, order)), dtype=complex)


def pade_phase(phase: FloatArray, order: int) -> FloatArray:
    """Return the phase lag of the approximant, rad, modulo 2 pi."""
    x = np.asarray(phase, dtype=float) / 2.0
    through, across = np.ones(x.shape), np.zeros(x.shape)
    for k in range(order, 0, -1):
        # Y_k = (2k-1)/(jx) + 1/Y_{k+1}; the ratio across/through carries tan, pole-free in pairs.
        through, across = (2 * k - 1) * through - x * across, x * through
        size = np.hypot(through, across)
        through, across = through / size, across / size
    return 2.0 * np.arctan2(across, through)


def pade_error(phase: float, order: int) -> float:
    """Return max |e^{-jx} - approximant| for 0 <= x <= phase.

    The phase error grows with x (the approximant's group delay never exceeds the delay), so the
    largest error stands at the end until the phase error reaches pi.
    """
    x = np.linspace(0.0, abs(phase), 65)
    return float(np.max(np.abs(np.exp(-1j * x) - pade_response(x, order))))


def pade_order(phase: float, tolerance: float) -> int:
    """Return the lowest order whose error is within `tolerance` up to `phase` (rad).

    Raises
    ------
    ValueError
        If no order up to 40 is good enough: the delay is too long for a rational stand-in.
    """
    for order in range(HIGHEST_ORDER + 1):
        if pade_error(phase, order) <= tolerance:
            return order
    raise ValueError(
        f"a delay of {abs(phase):.3g} rad at the band's edge has no rational stand-in within "
        f"{tolerance:.1g} up to order {HIGHEST_ORDER}"
    )


def pade_poles(delay: float, order: int) -> ComplexArray:
    """Return the poles of the approximant, rad/s."""
    if not order or not delay:
        return np.zeros(0, dtype=complex)
    return np.asarray(_unit_poles(order) / delay, dtype=complex)


@cache
def _unit_poles(order: int) -> ComplexArray:
    return np.asarray(np.linalg.eigvals(_unit_ladder(order)[0]), dtype=complex)


def pade_real(x: float, order: int) -> float:
    """Return the approximant at s tau = x, real."""
    half, tail = x / 2.0, np.inf
    for k in range(order, 0, -1):
        tail = (2 * k - 1) + half**2 / tail
    return float((tail - half) / (tail + half)) if order else 1.0
