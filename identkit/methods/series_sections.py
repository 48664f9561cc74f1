"""Well-scaled real state space of a rational function: first- and second-order sections in series.

Poles and zeros are paired by nearness on a logarithmic scale, so every section is close to 1 away
from its own frequency; inside a section the states are scaled by its natural frequency and input
and output gains are made equal.

Source: L. B. Jackson, "Roundoff-noise analysis for fixed-point digital filters realized in cascade
or parallel form", IEEE Trans. Audio Electroacoustics 18(2), 107-122, 1970 (pairing rule).
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

StateMatrices = tuple[FloatArray, FloatArray, FloatArray, FloatArray]


@dataclass(frozen=True)
class _Quadratic:
    """s^2 + rate s + square."""

    rate: float
    square: float


def series_state_space(poles: ComplexArray, zeros: ComplexArray, gain: float) -> StateMatrices:
    """Return A, B, C, D of gain prod(s - zeros) / prod(s - poles).

    Parameters
    ----------
    poles, zeros
        (order,) rad/s, each closed under conjugation, none at the origin.
    gain
        Value at infinite frequency.

    Returns
    -------
    tuple of FloatArray
        A (order, order) rad/s, B (order, 1), C (1, order), D (1, 1), D = gain.
    """
    below, pole_left = _quadratics(poles)
    above, zero_left = _quadratics(zeros)
    a, b, c, d = np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.ones((1, 1))
    sections = [_second_order(p, z) for p, z in _paired(below, above)]
    if pole_left is not None and zero_left is not None:
        sections.append(_first_order(pole_left, zero_left))
    for section in sections:
        a, b, c, d = _in_series((a, b, c, d), section)
    share = np.sqrt(abs(gain))
    return a, b * share, c * (gain / share), d * gain


def _quadratics(roots: ComplexArray) -> tuple[list[_Quadratic], float | None]:
    """Split into quadratics, real roots joined with their neighbours; an odd one is left over."""
    pairs = [_Quadratic(-2.0 * r.real, float(abs(r) ** 2)) for r in roots[roots.imag > 0.0]]
    real = sorted(roots[roots.imag == 0.0].real, key=abs)
    left = float(real.pop()) if len(real) % 2 else None
    pairs += [_Quadratic(-(p + q), p * q) for p, q in zip(real[::2], real[1::2], strict=True)]
    return sorted(pairs, key=lambda quadratic: quadratic.square), left


def _paired(
    below: list[_Quadratic], above: list[_Quadratic]
) -> list[tuple[_Quadratic, _Quadratic]]:
    """Give every pole pair, least damped first, the nearest zero pair that is left."""
    free, chosen = list(above), []
    for pole in sorted(below, key=lambda q: q.rate / np.sqrt(q.square)):
        nearest = min(free, key=lambda q: abs(np.log(q.square / pole.square)))
        free.remove(nearest)
        chosen.append((pole, nearest))
    return sorted(chosen, key=lambda pair: pair[0].square)


def _second_order(pole: _Quadratic, zero: _Quadratic) -> StateMatrices:
    natural = np.sqrt(pole.square)
    a = np.array([[0.0, natural], [-natural, -pole.rate]])
    c = np.array([[(zero.square - pole.square) / natural, zero.rate - pole.rate]])
    share = max(float(np.sqrt(np.abs(c).max())), 1e-8 * float(np.sqrt(natural)))
    return a, np.array([[0.0], [share]]), c / share, np.ones((1, 1))


def _first_order(pole: float, zero: float) -> StateMatrices:
    gap = pole - zero
    share = max(float(np.sqrt(abs(gap))), 1e-8 * float(np.sqrt(abs(pole))))
    return np.array([[pole]]), np.array([[share]]), np.array([[gap / share]]), np.ones((1, 1))


def _in_series(first: StateMatrices, second: StateMatrices) -> StateMatrices:
    """Feed the output of `first` to `second`."""
    (a1, b1, c1, d1), (a2, b2, c2, d2) = first, second
    a = np.block([[a1, np.zeros((a1.shape[0], a2.shape[0]))], [b2 @ c1, a2]])
    return a, np.vstack([b1, b2 @ d1]), np.hstack([d2 @ c1, c2]), d2 @ d1
