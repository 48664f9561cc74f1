"""Population modes by robust iteration: assign every response's modes, re-estimate, repeat.

Sources: start values from the density of fitted modes (Parzen 1962, mode_density.py); assignment
of each response at minimum cost (Kuhn 1955, mode_assignment.py); re-estimation by medians, median
absolute deviations (Hampel 1974) and the median of pairwise slopes (Sen 1968,
robust_distance.py). Alternating assignment and re-estimation is the scheme of S. P. Lloyd,
"Least squares quantization in PCM", IEEE Transactions on Information Theory 28 (1982) 129-137,
with medians for means and at most one mode of each response per centre.
"""

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.mode_assignment import UNPAIRED, assign_modes, pairing_cost
from identkit.methods.mode_density import density_centres
from identkit.methods.mode_template import (
    ModeTable,
    ModeTemplate,
    blank_template,
    join_templates,
    select_modes,
    sort_modes,
)
from identkit.methods.template_estimate import estimate_template

FARTHEST = 0.15  # in log frequency; nothing farther is ever the same mode
_MOST_ROUNDS = 20
_LEVEL = 5.0  # K, responses closer than this share a temperature level
_BANDWIDTH = 0.004


def find_population_modes(
    table: ModeTable, *, share: float, unpaired_cost: float
) -> tuple[ModeTemplate, IntArray]:
    """Find the population's modes and name every fitted mode after one of them, or none.

    Starts at the commonest temperature and takes in the others from there outward, so that a
    mode is followed rather than split; afterwards modes found in too few responses are dropped
    and modes that were overlooked are added, until nothing changes.

    Parameters
    ----------
    table
        Fitted modes of all responses.
    share
        Smallest share of the responses of its best-seen head that shows a population mode.
    unpaired_cost
        Cost of leaving a mode unpaired, see `assign_modes`.

    Returns
    -------
    tuple
        The template, and (responses, fitted) index of the population mode or -1.

    Notes
    -----
    Needs a majority of responses in which most modes were found; a mode seen by one lot only is
    not one of the population.
    """
    level = _levels(table.temperature)
    anchor = level == 0
    template = _initial(table.rows(anchor), share, table)
    for reach in sorted(set(level.tolist())):
        template = _settle(table.rows(level <= reach), template, unpaired_cost)[0]
    for _ in range(3):
        template, assigned = _settle(table, template, unpaired_cost)
        changed = _revise(table, template, assigned, share)
        if changed is None:
            break
        template = changed
    template, assigned = _settle(table, template, unpaired_cost)
    keep = found_share(table, assigned, len(template.log_frequency)) >= share
    template = sort_modes(select_modes(template, keep))
    return template, assign_all(table, template, unpaired_cost)


def assign_all(table: ModeTable, template: ModeTemplate, unpaired_cost: float) -> IntArray:
    """Return (responses, fitted) index of each fitted mode's population mode, or -1."""
    cost = pair_costs(table, template)
    assigned = np.full(table.log_frequency.shape, UNPAIRED, dtype=np.int64)
    for i, known in enumerate(np.isfinite(table.log_frequency)):
        assigned[i, known] = assign_modes(cost[i, known], unpaired_cost)
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


def found_share(table: ModeTable, assigned: IntArray, modes: int) -> FloatArray:
    """Return (modes,) share of responses showing each mode, of the head that shows it best."""
    best = np.zeros(modes)
    found = np.stack([(assigned == m).any(axis=1) for m in range(modes)], axis=1)
    groups = [table.head == h for h in np.unique(table.head)]
    large = [group for group in groups if group.sum() >= 4]
    for group in large or [np.ones(len(table.head), dtype=bool)]:
        best = np.maximum(best, found[group].mean(axis=0))
    return best


def _levels(temperature: FloatArray) -> IntArray:
    """Return temperature levels counted outward from the commonest, in at most five steps."""
    level = np.round((temperature - np.median(temperature)) / _LEVEL).astype(np.int64)
    names, counts = np.unique(level, return_counts=True)
    away = np.abs(level - names[np.argmax(counts)])
    ranks = np.searchsorted(np.unique(away), away)
    most = max(int(ranks.max()), 1)
    return np.asarray(np.ceil(ranks * min(5, most) / most), dtype=np.int64)


def _initial(anchor: ModeTable, share: float, table: ModeTable) -> ModeTemplate:
    known = np.isfinite(anchor.log_frequency)
    owner = np.broadcast_to(np.arange(len(known))[:, None], known.shape)[known]
    centres = density_centres(
        anchor.log_frequency[known], owner, len(known), _BANDWIDTH, 0.5 * share
    )
    return blank_template(table, centres, float(np.median(anchor.temperature)))


def _settle(
    table: ModeTable, template: ModeTemplate, unpaired_cost: float
) -> tuple[ModeTemplate, IntArray]:
    """Alternate assignment and re-estimation until no name changes."""
    before = None
    for _ in range(_MOST_ROUNDS):
        assigned = assign_all(table, template, unpaired_cost)
        if before is not None and np.array_equal(assigned, before):
            break
        template = estimate_template(table, template, assigned)
        before = assigned
    return template, assigned


def _revise(
    table: ModeTable, template: ModeTemplate, assigned: IntArray, share: float
) -> ModeTemplate | None:
    """Drop modes seen too rarely, add modes seen often but unnamed; None when neither."""
    modes = len(template.log_frequency)
    keep = found_share(table, assigned, modes) >= share
    left = np.isfinite(table.log_frequency) & (assigned == UNPAIRED)
    owner = np.broadcast_to(np.arange(len(left))[:, None], left.shape)[left]
    head_share = 1.0 / (int(table.head.max()) + 1)
    added = density_centres(
        table.log_frequency[left], owner, len(left), _BANDWIDTH, share * head_share
    )
    if keep.all() and added.size == 0:
        return None
    fresh = blank_template(table, added, template.temperature)
    return sort_modes(join_templates(select_modes(template, keep), fresh))


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
        template.residue_spread,
        table.residue_error[:, :, None, :],
    )
    log_wide = np.log(widening).mean(axis=-1)
    return np.sqrt((distance**2).mean(axis=-1)), np.exp(log_wide)
