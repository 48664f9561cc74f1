"""Assignment of every response's modes to a template, and how well the whole then fits.

Source: H. W. Kuhn, "The Hungarian method for the assignment problem", Naval Research Logistics
Quarterly 2 (1955) 83-97; costs as in mode_assignment.py.
"""

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.mode_assignment import UNPAIRED, assign_modes, pairing_cost
from identkit.methods.mode_template import (
    LEAST_DAMPING_SPREAD,
    LEAST_FREQUENCY_SPREAD,
    LEAST_RESIDUE_SPREAD,
    ModeTable,
    ModeTemplate,
)

FARTHEST = 0.15  # in log frequency; nothing farther is ever the same mode
_CHUNK = 2000  # responses whose costs are held at once


def assign_all(table: ModeTable, template: ModeTemplate, unpaired_cost: float) -> IntArray:
    """Return (responses, fitted) index of each fitted mode's population mode, or -1."""
    assigned = np.full(table.log_frequency.shape, UNPAIRED, dtype=np.int64)
    for first in range(0, len(assigned), _CHUNK):
        part = table.rows(slice(first, first + _CHUNK))
        cost = pair_costs(part, template)
        for i, known in enumerate(np.isfinite(part.log_frequency)):
            assigned[first + i, known] = assign_modes(cost[i, known], unpaired_cost)
    return assigned


def expected_log_frequency(table: ModeTable, template: ModeTemplate) -> FloatArray:
    """Return (responses, modes) log frequency the template expects of each response."""
    step = table.temperature - template.temperature
    return np.asarray(
        template.log_frequency
        + step[:, None] * template.frequency_slope
        + template.lot_offset[table.lot],
        dtype=float,
    )


def pair_costs(table: ModeTable, template: ModeTemplate) -> FloatArray:
    """Return (responses, fitted, modes) cost of every pair; infinite where ruled out."""
    expected = expected_log_frequency(table, template)
    apart = table.log_frequency[:, :, None] - expected[:, None, :]
    parts = [
        _scaled(apart, template.frequency_spread, table.log_frequency_error[:, :, None]),
        _scaled(
            table.log_damping[:, :, None] - template.log_damping,
            template.damping_spread,
            table.log_damping_error[:, :, None],
        ),
        _residue_distance(table, template),
    ]
    distance = np.stack([part[0] for part in parts], axis=-1)
    widening = np.stack([part[1] for part in parts], axis=-1)
    cost = pairing_cost(distance, widening)
    return np.where(np.abs(apart) <= FARTHEST, cost, np.inf)


def misfit(
    table: ModeTable, template: ModeTemplate, assigned: IntArray, unpaired_cost: float
) -> float:
    """Return minus twice the log likelihood of a template, up to a constant.

    The costs of all pairs, the logarithms of the spreads they are scaled by (a template that
    mixes two modes is wide, and pays for it), and the cost of every mode left unpaired.
    """
    cost = pair_costs(table, template)
    rows, places = np.nonzero(assigned != UNPAIRED)
    modes = assigned[rows, places]
    size = np.abs(template.residue[table.head[rows], modes])
    size = np.maximum(size, np.finfo(float).tiny)
    relative = template.residue_spread[table.head[rows], modes] / size
    wide = (
        np.log(template.frequency_spread[modes] / LEAST_FREQUENCY_SPREAD)
        + np.log(template.damping_spread[modes] / LEAST_DAMPING_SPREAD)
        + np.log(np.maximum(relative / LEAST_RESIDUE_SPREAD, 1.0)).mean(axis=-1)
    )
    fitted = int(np.isfinite(table.log_frequency).sum())
    wanted = len(table.head) * len(template.log_frequency)
    unpaired = fitted + wanted - 2 * len(rows)
    pairs = cost[rows, places, modes] + 2.0 * np.nan_to_num(wide, posinf=0.0)
    return float(pairs.sum() + unpaired_cost * unpaired)


def _scaled(
    apart: FloatArray, spread: FloatArray, error: FloatArray
) -> tuple[FloatArray, FloatArray]:
    wide = np.sqrt(spread**2 + error**2)
    return apart / wide, np.broadcast_to(wide / spread, apart.shape)


def _residue_distance(table: ModeTable, template: ModeTemplate) -> tuple[FloatArray, FloatArray]:
    """Root mean square over channels of the scaled residue difference: one quantity."""
    typical = template.residue[table.head]  # (responses, modes, channels)
    distance, widening = _scaled(
        table.residue[:, :, None, :] - typical[:, None, :, :],
        template.residue_spread[table.head][:, None, :, :],
        table.residue_error[:, :, None, :],
    )
    log_wide = np.log(widening).mean(axis=-1)
    return np.sqrt((distance**2).mean(axis=-1)), np.exp(log_wide)
