"""Peers: compares each response with those it should look like.

Responses on any grids are brought to coarse common cells of log frequency; each is held against
the responses of the same head where every head has at least six, against all otherwise.
"""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from identkit.methods.robust_distance import median_and_scale, rise_above_peers, standardised

CELL = 0.01  # width of a cell in log frequency
SIDEWAYS = 3  # cells: a resonance may stand 3 % to either side of its peers'
FEWEST_PEERS = 6
_LEAST_GAIN_SPREAD = 0.02  # 2 %: no bench's gain repeats better
_LEAST_PHASE_SPREAD = 0.15  # rad
_UNKNOWN = complex(np.nan, np.nan)


def odd_responses(parts: Sequence[xr.Dataset], usable: Sequence[xr.DataArray]) -> list[FloatArray]:
    """Return how far each response stands off its peers, in robust standard deviations.

    Parameters
    ----------
    parts
        Responses, one dataset per frequency grid.
    usable
        Which of their points to use.

    Returns
    -------
    list of FloatArray
        One (response,) array per part: the largest of the distances in broad gain, in broad
        phase and in resonances (rise above the peers' reach), worst channel; NaN with responses
        of fewer than six units.
    """
    edges = _cell_edges(parts, usable)
    curves, error = _gather_cells(parts, usable, edges)
    groups = peer_groups(parts)
    worst = np.full(curves.shape[0], np.nan)
    unit = _units(parts)
    for channel in range(curves.shape[1]):
        odd = _channel_oddness(curves[:, channel], error[:, channel], groups, unit)
        worst = np.fmax(worst, odd)
    return list(np.split(worst, np.cumsum([part.sizes["response"] for part in parts])[:-1]))


def peer_groups(parts: Sequence[xr.Dataset]) -> list[IntArray]:
    """Return index groups of peers: same head where the group is large enough, else everyone."""
    count = sum(part.sizes["response"] for part in parts)
    everyone = np.arange(count)
    if not all("head" in part.coords for part in parts):
        return [everyone]
    head = np.concatenate([part["head"].values.astype(str) for part in parts])
    groups = [np.flatnonzero(head == h) for h in np.unique(head)]
    if any(len(group) < FEWEST_PEERS for group in groups):
        return [everyone]
    return groups


def _cell_edges(parts: Sequence[xr.Dataset], usable: Sequence[xr.DataArray]) -> FloatArray:
    ends = []
    for part, mask in zip(parts, usable, strict=True):
        seen = mask.values.any(axis=(0, 1, 2)) & (part["frequency"].values > 0.0)
        ends.append(np.log(part["frequency"].values[seen]))
    joined = np.concatenate(ends) if ends else np.zeros(0)
    if joined.size == 0:
        return np.array([0.0, CELL])
    return np.arange(joined.min(), joined.max() + CELL, CELL) - 0.5 * CELL


def _gather_cells(
    parts: Sequence[xr.Dataset], usable: Sequence[xr.DataArray], edges: FloatArray
) -> tuple[ComplexArray, FloatArray]:
    """Return log response (real part log magnitude, imaginary part phase) and its error."""
    curves, errors = [], []
    for part, mask in zip(parts, usable, strict=True):
        dims = ("response", "output", "input", "frequency")
        measured = part["frequency_response"].transpose(*dims).values
        variance = (
            part["frequency_response_variance"].transpose(*dims).values
            if "frequency_response_variance" in part
            else np.zeros(measured.shape)
        )
        count = measured.shape[0]
        curve, error = cell_means(
            part["frequency"].values,
            measured.reshape(count, -1, measured.shape[-1]),
            variance.reshape(count, -1, measured.shape[-1]),
            mask.values.reshape(count, -1, measured.shape[-1]),
            edges,
        )
        curves.append(curve)
        errors.append(error)
    return np.concatenate(curves), np.concatenate(errors)


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


def _channel_oddness(
    curves: ComplexArray, error: FloatArray, groups: Sequence[IntArray], unit: IntArray
) -> FloatArray:
    worst, rise = np.full((2, len(curves)), np.nan)
    for group in groups:
        own = np.bincount(unit[group])
        units = int((own > 0).sum())
        if len(group) < FEWEST_PEERS or units < FEWEST_PEERS:
            continue
        magnitude = curves[group].real
        gain = median_and_scale(magnitude - median_and_scale(magnitude)[0], axis=1)[0]
        rise[group] = rise_above_peers(
            magnitude - gain[:, None], error[group], sideways=SIDEWAYS, own=int(own.max())
        )
        worst[group] = np.fmax(
            standardised(gain, units, _LEAST_GAIN_SPREAD),
            standardised(_phase_offset(curves[group]), units, _LEAST_PHASE_SPREAD),
        )
    return np.asarray(np.fmax(worst, _shared_by_unit(rise, unit)), dtype=float)


def _shared_by_unit(rise: FloatArray, unit: IntArray) -> FloatArray:
    """Weigh a rise by whether the other responses of the unit show it.

    A defect of the arm shows at most heads and temperatures: a response counts as its unit's
    median where it rises at least half as much itself. One that stands alone counts by 0.6.
    """
    typical = np.full(int(unit.max()) + 1, np.nan)
    for u in np.unique(unit):
        typical[u] = median_and_scale(rise[unit == u])[0]
    alone = np.where(np.bincount(unit)[unit] > 1, 0.6, 1.0) * rise
    return np.asarray(np.fmax(alone, np.minimum(typical[unit], 2.0 * rise)), dtype=float)


def _phase_offset(curves: ComplexArray) -> FloatArray:
    """Return the median absolute phase difference from the peers' median direction, rad."""
    direction = np.exp(1j * curves.imag)
    middle = median_and_scale(direction.real)[0] + 1j * median_and_scale(direction.imag)[0]
    return median_and_scale(np.abs(np.angle(direction * middle.conj())), axis=1)[0]


def _units(parts: Sequence[xr.Dataset]) -> IntArray:
    """Return the unit of every response, each its own where there is no label."""
    count = sum(part.sizes["response"] for part in parts)
    if not all("unit" in part.coords for part in parts):
        return np.arange(count)
    names = np.concatenate([part["unit"].values.astype(str) for part in parts])
    return np.asarray(np.unique(names, return_inverse=True)[1], dtype=np.int64)
