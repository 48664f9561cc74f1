"""Smallest relative radius any nominal value can have at one frequency: a weighted enclosing disc.

Over complex p, minimise max_i |P_i/p - 1|. In q = 1/p this is max_i |P_i| |q - 1/P_i|, the weighted
one-centre problem: convex, determined by at most three of the points (J. Elzinga, D. W. Hearn, "The
minimum covering sphere problem", Management Science 19(1), 1972, 96-104; N. Megiddo, "The weighted
Euclidean 1-center problem", Mathematics of Operations Research 8(4), 1983, 498-504). The optimum is
1, at p infinite, exactly when the origin lies in the convex hull of the P_i.

With two points active p = (|P_1| + |P_2|) / (e^{-j arg P_1} + e^{-j arg P_2}); with three p is the
centre of the circle through them, because |P_i - p| = rho |p| is a circle around p.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray, IntArray

TOLERANCE = 1e-12
_PAIRS = ((0, 3), (1, 3), (2, 3))
_TRIPLES = ((0, 1, 3), (0, 2, 3), (1, 2, 3))


@dataclass(frozen=True)
class EnclosingDisc:
    """Pointwise best nominal values.

    Attributes
    ----------
    radius
        (points,) the smallest relative radius, between 0 and 1.
    centre
        (points,) the value p attaining it; infinite where saturated.
    active
        (points, 3) indices of the responses that determine it, -1 where fewer than three.
    saturated
        (points,) whether the radius is 1: no nominal value does better than "nothing is known".
    """

    radius: FloatArray
    centre: ComplexArray
    active: IntArray
    saturated: BoolArray


def enclosing_disc(values: ComplexArray) -> EnclosingDisc:
    """Return the smallest relative radius and its centre at every frequency, by an active set.

    Parameters
    ----------
    values
        (responses, points) complex response values, not zero, at least one response.

    Returns
    -------
    EnclosingDisc
        Radii correct to about 1e-12 times the condition of the determining triangle.

    Notes
    -----
    The active set grows in radius with every exchange, so the loop ends; all frequencies move
    together and those that are done drop out.
    """
    points = values.shape[1]
    # Dividing by one value per frequency makes the problem free of unit and phase.
    scale: FloatArray = np.exp(np.mean(np.log(np.abs(values)), axis=0))
    scaled: ComplexArray = values / scale
    active = np.full((points, 3), np.argmax(np.abs(scaled), axis=0)[:, None])
    inverse_centre = 1.0 / np.take_along_axis(scaled.T, active[:, :1], axis=1)[:, 0]
    radius = np.zeros(points)
    open_points = np.arange(points)
    for _ in range(20 * len(values)):
        distance = np.abs(scaled[:, open_points] * inverse_centre[open_points] - 1.0)
        worst = np.argmax(distance, axis=0)
        beyond = np.take_along_axis(distance, worst[None], axis=0)[0]
        going = (beyond > radius[open_points] + TOLERANCE) & (radius[open_points] < 1.0)
        open_points, worst = open_points[going], worst[going]
        if not open_points.size:
            break
        four = np.column_stack([active[open_points], worst])
        chosen, rho, q = _best_of_four(scaled[four, open_points[:, None]], four)
        active[open_points], radius[open_points], inverse_centre[open_points] = chosen, rho, q
    saturated = radius >= 1.0 - TOLERANCE
    return _result(radius, inverse_centre, active, saturated, scale)


def _result(
    radius: FloatArray,
    inverse_centre: ComplexArray,
    active: IntArray,
    saturated: BoolArray,
    scale: FloatArray,
) -> EnclosingDisc:
    centre = np.full(radius.shape, complex(np.inf, 0.0))
    np.divide(scale, inverse_centre, out=centre, where=~saturated)
    distinct = active.copy()
    distinct[:, 1][active[:, 1] == active[:, 0]] = -1
    repeated = (active[:, 2] == active[:, 0]) | (active[:, 2] == active[:, 1])
    distinct[:, 2][repeated] = -1
    return EnclosingDisc(np.where(saturated, 1.0, radius), centre, distinct, saturated)


def _best_of_four(
    values: ComplexArray, index: IntArray
) -> tuple[IntArray, FloatArray, ComplexArray]:
    """Solve the problem of the three active values and a new one, (points, 4), by enumeration.

    The new one (column 3) lies outside the old disc, so it is in every candidate set; among the
    candidates whose disc covers all four the smallest is the optimum, and radius 1 if none does.
    """
    count = len(values)
    best = np.ones(count)
    best_q = np.zeros(count, dtype=complex)
    chosen = index[:, [0, 1, 3]].copy()
    for columns in (*_PAIRS, *_TRIPLES):
        picked = values[:, columns]
        q = _pair_centre(picked) if len(columns) == 2 else _triple_centre(picked)
        distance = np.abs(values * q[:, None] - 1.0)
        radius = distance[:, columns].max(axis=1)
        covers = distance.max(axis=1) <= radius * (1.0 + 1e-13) + 1e-14
        better = covers & (radius < best)
        best = np.where(better, radius, best)
        best_q = np.where(better, q, best_q)
        padded = columns if len(columns) == 3 else (*columns, columns[-1])
        chosen[better] = index[better][:, padded]
    return chosen, best, best_q


def _pair_centre(values: ComplexArray) -> ComplexArray:
    size = np.abs(values)
    return np.asarray((values.conj() / size).sum(axis=1) / size.sum(axis=1), dtype=complex)


def _triple_centre(values: ComplexArray) -> ComplexArray:
    """Return 1/p, p the centre of the circle through three values; 0 where they lie on a line."""
    a, b = values[:, 1] - values[:, 0], values[:, 2] - values[:, 0]
    cross = 2.0 * (a.conj() * b).imag
    offset = 1j * (a * np.abs(b) ** 2 - b * np.abs(a) ** 2)
    # p = P_1 + offset / cross, written so that a vanishing cross gives q = 0 instead of 0/0.
    denominator = values[:, 0] * cross + offset
    safe = np.where(denominator == 0.0, 1.0, denominator)
    return np.asarray(np.where(denominator == 0.0, 0.0, cross / safe), dtype=complex)
