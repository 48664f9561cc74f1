"""Where a function of frequency can peak, and finding its peaks by bracketed refinement.

A ratio of rational functions varies fast only near its poles and zeros, there on the scale of
their distance from the imaginary axis. The grid is therefore clustered at each of them, with
spacings that are a fraction of that distance; every local maximum of the grid is then refined by
golden sections (J. Kiefer, Proc. Amer. Math. Soc. 4, 1953).
"""

from collections.abc import Callable

import numpy as np

from identkit.plant_set.fields import ComplexArray, FloatArray, IntArray
from identkit.plant_set.response import TWO_PI

Evaluate = Callable[[IntArray, FloatArray], FloatArray]

CLUSTER_POINTS = 41
CLUSTER_REACH = 60.0
SHARE_REFINED = 0.7
_STEPS = 32
_GOLDEN = 0.5 * (np.sqrt(5.0) - 1.0)


def clustered(features: ComplexArray, band: tuple[float, float]) -> FloatArray:
    """Return frequencies (Hz) clustered at poles and zeros (rad/s), kept inside the band.

    Parameters
    ----------
    features
        (..., features) complex, rad/s; spacing grows from a quarter of |Re| outwards.
    band
        [low, high] Hz.

    Returns
    -------
    FloatArray
        (..., features * points) Hz, not sorted.
    """
    low, high = band
    stretch = np.sinh(np.linspace(-1.0, 1.0, CLUSTER_POINTS) * np.arcsinh(CLUSTER_REACH))
    # A feature on the axis itself (an integrator) still gets a cluster of finite width.
    half = np.maximum(np.abs(features.real), 1e-7 * np.maximum(np.abs(features), low))
    spread = np.abs(features.imag)[..., None] + half[..., None] * stretch
    hertz = (spread / TWO_PI).reshape(*features.shape[:-1], -1)
    return np.asarray(np.clip(hertz, low, high))


def even_grid(band: tuple[float, float], per_decade: int = 120) -> FloatArray:
    """Return log-spaced frequencies over the band, both ends included."""
    low, high = band
    start = low if low > 0.0 else 1e-4 * high
    count = 2 + int(per_decade * np.log10(high / start))
    grid = np.geomspace(start, high, count)
    grid[0], grid[-1] = low, high
    return np.asarray(grid)


def highest(
    grid: FloatArray, values: FloatArray, evaluate: Evaluate
) -> tuple[FloatArray, FloatArray]:
    """Return the largest value of each row and where it stands, refined between grid points.

    Parameters
    ----------
    grid, values
        (rows, points) frequencies, sorted along each row, and the function there.
    evaluate
        Function of (row indices, frequencies), both (brackets,).

    Returns
    -------
    tuple
        (rows,) largest value and (rows,) its frequency.
    """
    rows = np.arange(grid.shape[0])
    best = values.argmax(axis=1)
    top, where = values[rows, best].copy(), grid[rows, best].copy()
    row, column = np.nonzero(_local_maxima(values) & (values >= SHARE_REFINED * top[:, None]))
    last = grid.shape[1] - 1
    left, right = grid[row, np.maximum(column - 1, 0)], grid[row, np.minimum(column + 1, last)]
    peak, place = _golden(row, left, right, evaluate)
    for index, value, frequency in zip(row, peak, place, strict=True):
        if value > top[index]:
            top[index], where[index] = value, frequency
    return top, where


def _local_maxima(values: FloatArray) -> "np.ndarray[tuple[int, ...], np.dtype[np.bool_]]":
    padded = np.pad(values, ((0, 0), (1, 1)), constant_values=-np.inf)
    return (values >= padded[:, :-2]) & (values >= padded[:, 2:])


def _golden(
    row: IntArray, left: FloatArray, right: FloatArray, evaluate: Evaluate
) -> tuple[FloatArray, FloatArray]:
    """Shrink all brackets at once; return the best value met in each and where."""
    inner = right - _GOLDEN * (right - left)
    outer = left + _GOLDEN * (right - left)
    at_inner, at_outer = evaluate(row, inner), evaluate(row, outer)
    for _ in range(_STEPS):
        keep_left = at_inner >= at_outer
        left, right = np.where(keep_left, left, inner), np.where(keep_left, outer, right)
        fresh = np.where(
            keep_left, right - _GOLDEN * (right - left), left + _GOLDEN * (right - left)
        )
        at_fresh = evaluate(row, fresh)
        inner, outer = np.where(keep_left, fresh, outer), np.where(keep_left, inner, fresh)
        at_inner, at_outer = (
            np.where(keep_left, at_fresh, at_outer),
            np.where(keep_left, at_inner, at_fresh),
        )
    better = at_inner >= at_outer
    return np.where(better, at_inner, at_outer), np.where(better, inner, outer)
