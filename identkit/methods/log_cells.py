"""Averages over cells of log frequency: responses on any grid, made comparable.

Common practice; averaging complex values over the points of a cell keeps the noise of minima
from counting more than that of maxima.
"""

import numpy as np

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray

_UNKNOWN = complex(np.nan, np.nan)


def cell_means(
    frequency: FloatArray,
    measured: ComplexArray,
    variance: FloatArray,
    usable: BoolArray,
    edges: FloatArray,
) -> tuple[ComplexArray, FloatArray]:
    """Average responses over cells of log frequency; empty cells inside the range are bridged.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    measured, variance, usable
        (responses, channels, points).
    edges
        (cells + 1,) cell edges in log frequency.

    Returns
    -------
    tuple
        (responses, channels, cells) log magnitude + 1j phase (rad), NaN outside the range; and
        the standard deviation of the log magnitude.
    """
    cells = len(edges) - 1
    cell = np.clip(np.searchsorted(edges, np.log(np.maximum(frequency, 1e-300))) - 1, 0, cells - 1)
    starts = np.flatnonzero(np.r_[True, np.diff(cell) > 0])
    kept = np.where(usable & (frequency > 0.0), measured, 0.0)
    weight = np.add.reduceat(kept != 0.0, starts, axis=-1).astype(float)
    mean = np.add.reduceat(kept, starts, axis=-1) / np.maximum(weight, 1.0)
    noise = np.add.reduceat(np.where(kept != 0.0, variance, 0.0), starts, axis=-1)
    shape = (*measured.shape[:2], cells)
    curve = np.full(shape, _UNKNOWN)
    error = np.full(shape, np.nan)
    known = (weight > 0.0) & (np.abs(mean) > 0.0)
    size = np.abs(np.where(known, mean, 1.0))
    logged = np.where(known, np.log(size) + 1j * np.angle(mean), _UNKNOWN)
    relative = np.where(known, np.sqrt(noise / 2.0) / np.maximum(weight, 1.0) / size, np.nan)
    curve[..., cell[starts]] = logged
    error[..., cell[starts]] = relative
    return _bridge(curve), np.asarray(_bridge(error).real, dtype=float)


def _bridge(curve: ComplexArray | FloatArray) -> ComplexArray:
    """Fill empty cells from the last known one to their left, inside the known range only."""
    known = np.isfinite(curve)
    places = np.arange(curve.shape[-1])
    last = np.maximum.accumulate(np.where(known, places, -1), axis=-1)
    ahead = np.flip(np.maximum.accumulate(np.flip(known, -1), axis=-1), -1)
    filled = np.take_along_axis(curve, np.maximum(last, 0), axis=-1)
    return np.asarray(np.where((last >= 0) & ahead, filled, _UNKNOWN), dtype=complex)
