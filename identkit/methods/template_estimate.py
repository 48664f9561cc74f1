"""Robust estimate of a population's modes from modes that were named.

Sources: F. R. Hampel, "The influence curve and its role in robust estimation", Journal of the
American Statistical Association 69 (1974) 383-393 (median, median absolute deviation); P. K. Sen,
"Estimates of the regression coefficient based on Kendall's tau", Journal of the American
Statistical Association 63 (1968) 1379-1389 (temperature slope).
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.mode_template import (
    LEAST_DAMPING_SPREAD,
    LEAST_FREQUENCY_SPREAD,
    LEAST_RESIDUE_SPREAD,
    ModeTable,
    ModeTemplate,
)
from identkit.methods.robust_distance import median_and_scale, median_slope


def estimate_template(table: ModeTable, template: ModeTemplate, assigned: IntArray) -> ModeTemplate:
    """Re-estimate centres, slopes, spreads and head residues from the modes named.

    Parameters
    ----------
    table
        Fitted modes.
    template
        The template before; modes named fewer than twice keep its values.
    assigned
        (responses, fitted) index of the population mode, or -1.

    Returns
    -------
    ModeTemplate
        With spreads beside fit error, never below the least spreads of mode_template.py.
    """
    if template.log_frequency.size == 0:
        return template
    columns = [
        _estimate_mode(table, template, assigned == m, m)
        for m in range(len(template.log_frequency))
    ]
    stacked = [np.stack([column[k] for column in columns], axis=-1) for k in range(6)]
    residue = np.stack([column[6] for column in columns], axis=1)
    residue_spread = np.stack([column[7] for column in columns], axis=1)
    return ModeTemplate(
        template.temperature,
        stacked[0],
        stacked[1],
        stacked[2],
        stacked[3],
        stacked[4],
        stacked[5],
        residue,
        residue_spread,
    )


def _estimate_mode(
    table: ModeTable, template: ModeTemplate, mine: BoolArray, m: int
) -> tuple[FloatArray, ...]:
    found = mine.any(axis=1)
    if found.sum() < 2:
        return (
            template.log_frequency[m],
            template.frequency_slope[m],
            template.frequency_spread[m],
            template.lot_offset[:, m],
            template.log_damping[m],
            template.damping_spread[m],
            template.residue[:, m],
            template.residue_spread[:, m],
        )
    frequency = table.log_frequency[mine]
    step = table.temperature[found] - template.temperature
    offset = template.lot_offset[table.lot[found], m]
    slope = median_slope(step, frequency - offset)
    detrended = frequency - slope * step
    centre = np.median(detrended)
    lot_offset = _lot_offsets(detrended - centre, table.lot[found], template.lot_offset.shape[0])
    spread = _beside_error(
        detrended - centre - lot_offset[table.lot[found]],
        table.log_frequency_error[mine],
        LEAST_FREQUENCY_SPREAD,
    )
    damping = np.median(table.log_damping[mine])
    damping_spread = _beside_error(
        table.log_damping[mine] - damping, table.log_damping_error[mine], LEAST_DAMPING_SPREAD
    )
    residue, residue_spread = _head_residues(
        table.residue[mine],
        table.residue_error[mine],
        table.head[found],
        template.residue.shape[0],
    )
    numbers = (centre, np.float64(slope), spread, lot_offset, damping, damping_spread)
    return (*(np.asarray(n) for n in numbers), residue, residue_spread)


def _lot_offsets(residual: FloatArray, lot: IntArray, lots: int) -> FloatArray:
    """Shrunken median of each lot: a lot of n responses counts n / (n + 3)."""
    offset = np.zeros(lots)
    if lots < 2:
        return offset
    for k in range(lots):
        own = residual[lot == k]
        if own.size:
            offset[k] = np.median(own) * own.size / (own.size + 3.0)
    return offset


def _beside_error(residual: FloatArray, error: FloatArray, least: float) -> FloatArray:
    scale = median_and_scale(residual)[1]
    left = scale**2 - np.nanmedian(error) ** 2
    return np.asarray(np.sqrt(max(float(left), least**2)))


def _head_residues(
    residue: FloatArray, error: FloatArray, head: IntArray, heads: int
) -> tuple[FloatArray, FloatArray]:
    """Return (heads, channels) medians and their spread beside fit error.

    The spread is taken relative to the head's own size, for a head near a node spreads less; no
    head counts as smaller than a quarter of the root mean square over heads.
    """
    everyone = np.median(residue, axis=0)
    centre = np.tile(everyone, (heads, 1))
    for h in range(heads):
        if (head == h).sum() >= 3:
            centre[h] = np.median(residue[head == h], axis=0)
    overall = np.sqrt((centre**2).mean(axis=0))
    size = np.maximum(np.maximum(np.abs(centre), 0.25 * overall), np.finfo(float).tiny)
    scale = median_and_scale((residue - centre[head]) / size[head])[1]
    noise = np.nanmedian(error / size[head], axis=0)
    left = np.sqrt(np.maximum(scale**2 - noise**2, 0.0))
    return centre, np.maximum(left, LEAST_RESIDUE_SPREAD) * size
