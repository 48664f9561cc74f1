"""Peers: compares each response with those it should look like.

Responses on any grids are brought to coarse common cells of log frequency; each is held against
the responses of the same head where every head has at least six, against all otherwise. What
is usual is learnt from at most a few hundred peers, and responses are judged in chunks, so that
memory does not grow with the campaign.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from identkit.methods.log_cells import cell_means
from identkit.methods.robust_distance import (
    PeerReach,
    median_and_scale,
    reach_of_peers,
    rise_above_peers,
    standardised,
)
from identkit.stages.response_labels import text_label, unit_label

CELL = 0.01  # width of a cell in log frequency
SIDEWAYS = 3  # cells: a resonance may stand 3 % to either side of its peers'
FEWEST_PEERS = 6
MOST_PEERS = 400
_CHUNK = 500
_LEAST_GAIN_SPREAD = 0.02  # 2 %: no bench's gain repeats better
_LEAST_PHASE_SPREAD = 0.15  # rad
_DIMS = ("response", "output", "input", "frequency")


@dataclass(frozen=True)
class _Campaign:
    """All responses in one numbering, whatever grid they are on."""

    parts: Sequence[xr.Dataset]
    usable: Sequence[BoolArray]
    first: IntArray  # (parts,) number of each part's first response
    edges: FloatArray
    unit: IntArray
    group: IntArray


@dataclass(frozen=True)
class _Usual:
    """What is usual for one channel of one group of peers."""

    log_magnitude: FloatArray
    direction: ComplexArray
    reach: PeerReach


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
    campaign = _campaign(parts, usable)
    usual = {g: _learn(campaign, g) for g in np.unique(campaign.group).tolist()}
    channels = parts[0].sizes["output"] * parts[0].sizes["input"]
    measures = np.full((3, len(campaign.unit), channels), np.nan)
    for rows, curves, error in _chunks(campaign, None):
        for g, peers in usual.items():
            mine = campaign.group[rows] == g
            if peers is not None and mine.any():
                measures[:, rows[mine]] = _measure(curves[mine], error[mine], peers)
    worst = np.full(len(campaign.unit), np.nan)
    for channel in range(channels):
        worst = np.fmax(worst, _oddness(measures[:, :, channel], campaign))
    return list(np.split(worst, campaign.first[1:]))


def peer_groups(parts: Sequence[xr.Dataset]) -> IntArray:
    """Return the group of each response: its head where every head has six, else one group."""
    count = sum(part.sizes["response"] for part in parts)
    head = _numbered(text_label(parts, "head"))
    if head is None or np.bincount(head).min() < FEWEST_PEERS:
        return np.zeros(count, dtype=np.int64)
    return head


def _campaign(parts: Sequence[xr.Dataset], usable: Sequence[xr.DataArray]) -> _Campaign:
    sizes = [part.sizes["response"] for part in parts]
    unit = _numbered(unit_label(parts))
    return _Campaign(
        parts,
        [mask.transpose(*_DIMS).values for mask in usable],
        np.concatenate([[0], np.cumsum(sizes)[:-1]]).astype(np.int64),
        _cell_edges(parts, usable),
        np.arange(sum(sizes)) if unit is None else unit,
        peer_groups(parts),
    )


def _numbered(names: NDArray[np.str_] | None) -> IntArray | None:
    if names is None:
        return None
    return np.asarray(np.unique(names, return_inverse=True)[1], dtype=np.int64)


def _cell_edges(parts: Sequence[xr.Dataset], usable: Sequence[xr.DataArray]) -> FloatArray:
    ends = []
    for part, mask in zip(parts, usable, strict=True):
        seen = mask.values.any(axis=(0, 1, 2)) & (part["frequency"].values > 0.0)
        ends.append(np.log(part["frequency"].values[seen]))
    joined = np.concatenate(ends) if ends else np.zeros(0)
    if joined.size == 0:
        return np.array([0.0, CELL])
    return np.arange(joined.min(), joined.max() + CELL, CELL) - 0.5 * CELL


def _chunks(
    campaign: _Campaign, chosen: IntArray | None
) -> Iterator[tuple[IntArray, ComplexArray, FloatArray]]:
    """Yield (numbers, curves, errors) of some responses, or of all, a few hundred at a time."""
    for part, usable, first in zip(campaign.parts, campaign.usable, campaign.first, strict=True):
        count = part.sizes["response"]
        local = np.arange(count)
        if chosen is not None:
            local = chosen[(chosen >= first) & (chosen < first + count)] - first
        for start in range(0, len(local), _CHUNK):
            rows = local[start : start + _CHUNK]
            some = part.isel(response=rows)
            measured = some["frequency_response"].transpose(*_DIMS).values
            variance = (
                some["frequency_response_variance"].transpose(*_DIMS).values
                if "frequency_response_variance" in some
                else np.zeros(measured.shape)
            )
            shape = (len(rows), -1, measured.shape[-1])
            curves, error = cell_means(
                some["frequency"].values,
                measured.reshape(shape),
                variance.reshape(shape),
                usable[rows].reshape(shape),
                campaign.edges,
            )
            yield rows + first, curves, error


def _learn(campaign: _Campaign, group: int) -> list[_Usual] | None:
    """Return what is usual per channel; None with responses of fewer than six units."""
    members = np.flatnonzero(campaign.group == group)
    units = np.random.default_rng(0).permutation(np.unique(campaign.unit[members]))
    if len(units) < FEWEST_PEERS:
        return None
    counts = np.bincount(campaign.unit[members])
    enough = int(np.searchsorted(np.cumsum(counts[units]), MOST_PEERS)) + 1
    kept = units[: max(enough, FEWEST_PEERS)]
    sample = members[np.isin(campaign.unit[members], kept)]
    curves = np.concatenate([part for _, part, _ in _chunks(campaign, sample)])
    return [_usual(curves[:, k], int(counts[kept].max())) for k in range(curves.shape[1])]


def _usual(curves: ComplexArray, own: int) -> _Usual:
    magnitude = median_and_scale(curves.real)[0]
    direction = np.exp(1j * curves.imag)
    middle = median_and_scale(direction.real)[0] + 1j * median_and_scale(direction.imag)[0]
    levelled = curves.real - _gain(curves, magnitude)[:, None]
    return _Usual(magnitude, middle, reach_of_peers(levelled, sideways=SIDEWAYS, own=own))


def _gain(curves: ComplexArray, usual: FloatArray) -> FloatArray:
    """Return the broad difference of log magnitude from the usual one."""
    return median_and_scale(curves.real - usual, axis=1)[0]


def _measure(curves: ComplexArray, error: FloatArray, peers: Sequence[_Usual]) -> FloatArray:
    """Return (3, responses, channels): broad gain, broad phase difference (rad), rise."""
    result = np.empty((3, *curves.shape[:2]))
    for k, usual in enumerate(peers):
        gain = _gain(curves[:, k], usual.log_magnitude)
        turned = np.angle(np.exp(1j * curves[:, k].imag) * usual.direction.conj())
        result[0, :, k] = gain
        result[1, :, k] = median_and_scale(np.abs(turned), axis=1)[0]
        levelled = curves[:, k].real - gain[:, None]
        result[2, :, k] = rise_above_peers(levelled, error[:, k], usual.reach)
    return result


def _oddness(measures: FloatArray, campaign: _Campaign) -> FloatArray:
    """Return the largest distance of one channel, gain and phase judged within their group."""
    gain, phase, rise = measures
    worst = _shared_by_unit(rise, campaign.unit)
    for g in np.unique(campaign.group):
        mine = campaign.group == g
        units = len(np.unique(campaign.unit[mine]))
        broad = np.fmax(
            standardised(gain[mine], units, _LEAST_GAIN_SPREAD),
            standardised(phase[mine], units, _LEAST_PHASE_SPREAD),
        )
        worst[mine] = np.fmax(worst[mine], broad)
    return worst


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
