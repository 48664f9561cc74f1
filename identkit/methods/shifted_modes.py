"""Shifted modes: a mode left over and a population mode left open that can only be each other.

After every response's modes were assigned at minimum cost (Kuhn 1955, mode_assignment.py), what
is left over on both sides is assigned once more under a looser rule of our own, so that a mode
moved by damage keeps its name and is reported as shifted instead of as one missing and one extra.
The rule: within 12 % in frequency, residue of the same sign and within a factor 3, damping
within a factor 4, and no other named mode of the response jumped over.
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.mode_assignment import UNPAIRED, assign_modes
from identkit.methods.mode_template import ModeTable, ModeTemplate
from identkit.methods.template_assignment import expected_log_frequency

MOST_SHIFT = 0.12
_RESIDUE_FACTOR = 3.0
_DAMPING_FACTOR = 4.0


def pair_shifted_modes(
    table: ModeTable, template: ModeTemplate, assigned: IntArray
) -> tuple[IntArray, BoolArray]:
    """Pair what an assignment left over with what it left open.

    Parameters
    ----------
    table, template
        Fitted modes and the population's.
    assigned
        (responses, fitted) index of the population mode, or -1.

    Returns
    -------
    tuple
        The assignment completed, and (responses, fitted) whether a mode was paired here.
    """
    modes = len(template.log_frequency)
    result = assigned.copy()
    expected = expected_log_frequency(table, template)
    open_modes = np.ones((len(assigned), modes), dtype=bool)
    rows, places = np.nonzero(assigned != UNPAIRED)
    open_modes[rows, assigned[rows, places]] = False
    left = np.isfinite(table.log_frequency) & (assigned == UNPAIRED)
    for i in np.flatnonzero(left.any(axis=1) & open_modes.any(axis=1)).tolist():
        fitted, wanted = np.flatnonzero(left[i]), np.flatnonzero(open_modes[i])
        shift = np.abs(table.log_frequency[i, fitted][:, None] - expected[i, wanted][None, :])
        allowed = (shift <= MOST_SHIFT) & _alike(table, template, i, fitted, wanted)
        allowed &= ~_jumps(table.log_frequency[i], expected[i], assigned[i], fitted, wanted)
        chosen = assign_modes(np.where(allowed, shift, np.inf), MOST_SHIFT)
        result[i, fitted[chosen >= 0]] = wanted[chosen[chosen >= 0]]
    return result, result != assigned


def _alike(
    table: ModeTable, template: ModeTemplate, i: int, fitted: IntArray, wanted: IntArray
) -> BoolArray:
    damping = table.log_damping[i, fitted][:, None] - template.log_damping[wanted][None, :]
    residue = table.residue[i, fitted][:, None, :]
    typical = template.residue[table.head[i], wanted][None, :, :]
    # The typical size squared: positive and between 1/3 and 3 times, summed over channels.
    ratio = (residue * typical).sum(axis=-1) / np.maximum((typical**2).sum(axis=-1), 1e-300)
    close = (ratio > 1.0 / _RESIDUE_FACTOR) & (ratio < _RESIDUE_FACTOR)
    return np.asarray(close & (np.abs(damping) < np.log(_DAMPING_FACTOR)))


def _jumps(
    position: FloatArray,
    expected: FloatArray,
    assigned: IntArray,
    fitted: IntArray,
    wanted: IntArray,
) -> BoolArray:
    """Return (fitted, wanted): whether pairing puts two named modes in the wrong order."""
    named = np.flatnonzero(assigned != UNPAIRED)
    here = np.sign(position[fitted][:, None] - position[named][None, :])
    there = np.sign(expected[wanted][:, None] - expected[assigned[named]][None, :])
    return np.asarray((here[:, None, :] * there[None, :, :] < 0).any(axis=-1))
