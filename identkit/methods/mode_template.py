"""Tables of fitted modes and of what the population's modes look like, as plain arrays.

The template is what mode_population.py estimates and mode_assignment.py names modes after.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray, IntArray

LEAST_FREQUENCY_SPREAD = 0.005
LEAST_DAMPING_SPREAD = 0.10
LEAST_RESIDUE_SPREAD = 0.10


@dataclass(frozen=True)
class ModeTable:
    """All fitted modes of all responses, padded with NaN.

    Attributes
    ----------
    log_frequency, log_damping
        (responses, fitted).
    residue
        (responses, fitted, channels).
    log_frequency_error, log_damping_error, residue_error
        Standard errors of the above, zero where unknown.
    temperature
        (responses,) degC, all equal where not known.
    head, lot
        (responses,) group indices from 0; all 0 where not labelled.
    heads, lots
        Number of groups in the whole campaign.
    """

    log_frequency: FloatArray
    log_damping: FloatArray
    residue: FloatArray
    log_frequency_error: FloatArray
    log_damping_error: FloatArray
    residue_error: FloatArray
    temperature: FloatArray
    head: IntArray
    lot: IntArray
    heads: int
    lots: int

    def rows(self, chosen: BoolArray | slice) -> "ModeTable":
        """Return the table of some responses; heads and lots keep their numbers."""
        arrays: dict[str, Any] = {
            n: v[chosen] for n, v in vars(self).items() if isinstance(v, np.ndarray)
        }
        return replace(self, **arrays)


@dataclass(frozen=True)
class ModeTemplate:
    """What the population's modes look like, robustly.

    Attributes
    ----------
    temperature
        Temperature the centres hold at, degC.
    log_frequency, frequency_slope, frequency_spread
        (modes,) centre, change per K, standard deviation beside fit error.
    lot_offset
        (lots, modes) shift of each lot's log frequency.
    log_damping, damping_spread
        (modes,); NaN before the first estimate.
    residue, residue_spread
        (heads, modes, channels) typical residue of each head and its standard deviation beside
        fit error; NaN before the first estimate.
    """

    temperature: float
    log_frequency: FloatArray
    frequency_slope: FloatArray
    frequency_spread: FloatArray
    lot_offset: FloatArray
    log_damping: FloatArray
    damping_spread: FloatArray
    residue: FloatArray
    residue_spread: FloatArray


def blank_template(table: ModeTable, centres: FloatArray, temperature: float) -> ModeTemplate:
    """Return a template that knows only where its modes are, in log frequency."""
    modes, channels = len(centres), table.residue.shape[2]
    return ModeTemplate(
        temperature,
        centres,
        np.zeros(modes),
        np.full(modes, 2.0 * LEAST_FREQUENCY_SPREAD),
        np.zeros((table.lots, modes)),
        np.full(modes, np.nan),
        np.full(modes, np.nan),
        np.full((table.heads, modes, channels), np.nan),
        np.full((table.heads, modes, channels), np.nan),
    )


def template_from(
    blank: ModeTemplate,
    head: int,
    log_damping: FloatArray,
    damping_spread: float,
    residue: FloatArray,
    residue_spread: float,
) -> ModeTemplate:
    """Return a template that knows damping, and the residues of one head, from one response.

    `residue_spread` is relative to each residue; other heads stay unknown.
    """
    residues, spreads = blank.residue.copy(), blank.residue_spread.copy()
    residues[head] = residue
    spreads[head] = np.maximum(residue_spread * np.abs(residue), np.finfo(float).tiny)
    return replace(
        blank,
        log_damping=log_damping,
        damping_spread=np.full(len(log_damping), damping_spread),
        residue=residues,
        residue_spread=spreads,
    )


def select_modes(template: ModeTemplate, chosen: BoolArray | IntArray) -> ModeTemplate:
    """Return the template of some modes, in the order given."""
    return replace(
        template,
        log_frequency=template.log_frequency[chosen],
        frequency_slope=template.frequency_slope[chosen],
        frequency_spread=template.frequency_spread[chosen],
        lot_offset=template.lot_offset[:, chosen],
        log_damping=template.log_damping[chosen],
        damping_spread=template.damping_spread[chosen],
        residue=template.residue[:, chosen],
        residue_spread=template.residue_spread[:, chosen],
    )


def sort_modes(template: ModeTemplate) -> ModeTemplate:
    """Return the template with its modes in ascending frequency."""
    return select_modes(template, np.argsort(template.log_frequency, kind="stable"))


def at_temperature(template: ModeTemplate, temperature: float) -> ModeTemplate:
    """Return the template with its centres at another temperature, degC."""
    step = temperature - template.temperature
    moved = template.log_frequency + step * template.frequency_slope
    return replace(template, temperature=temperature, log_frequency=moved)


def join_templates(first: ModeTemplate, second: ModeTemplate) -> ModeTemplate:
    """Return a template with the modes of both."""
    return ModeTemplate(
        first.temperature,
        np.concatenate([first.log_frequency, second.log_frequency]),
        np.concatenate([first.frequency_slope, second.frequency_slope]),
        np.concatenate([first.frequency_spread, second.frequency_spread]),
        np.concatenate([first.lot_offset, second.lot_offset], axis=1),
        np.concatenate([first.log_damping, second.log_damping]),
        np.concatenate([first.damping_spread, second.damping_spread]),
        np.concatenate([first.residue, second.residue], axis=1),
        np.concatenate([first.residue_spread, second.residue_spread], axis=1),
    )
