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
from identkit.methods.mode_assignment import UNPAIRED
from identkit.methods.mode_density import density_centres
from identkit.methods.mode_template import (
    ModeTable,
    ModeTemplate,
    at_temperature,
    blank_template,
    join_templates,
    select_modes,
    sort_modes,
)
from identkit.methods.population_starts import BANDWIDTH, starts
from identkit.methods.template_assignment import assign_all, misfit
from identkit.methods.template_estimate import estimate_template

_MOST_ROUNDS = 20
_MOST_RESPONSES = 2000
_WIDER = (3.0 * BANDWIDTH, 9.0 * BANDWIDTH)
_CLEAR = 4.0  # spreads between neighbouring modes that no start can mix up


def find_population_modes(
    table: ModeTable,
    *,
    share: float,
    unpaired_cost: float,
    reference_temperature: float | None = None,
) -> tuple[ModeTemplate, IntArray]:
    """Find the population's modes and name every fitted mode after one of them, or none.

    Starts at the commonest temperature and takes in the others from there outward, so that a
    mode is followed rather than split; afterwards modes found in too few responses are dropped
    and modes that were overlooked are added, until nothing changes. Where neighbouring modes
    overlap somewhere in the campaign, the search is repeated from other starts
    (population_starts.py) and the likeliest end is kept.

    Parameters
    ----------
    table
        Fitted modes of all responses.
    share
        Smallest share of the responses of its best-seen head that shows a population mode.
    unpaired_cost
        Cost of leaving a mode unpaired, see `assign_modes`.
    reference_temperature
        degC at which the template holds and the modes are put in order of frequency; the
        responses' median when None.

    Returns
    -------
    tuple
        The template, and (responses, fitted) index of the population mode or -1.

    Notes
    -----
    Needs a majority of responses in which most modes were found; a mode seen by one lot only is
    not one of the population.
    """
    if reference_temperature is None:
        reference_temperature = float(np.median(table.temperature))
    some = _sample(table)
    best: tuple[float, ModeTemplate] | None = None
    for start, steps in starts(some, share):
        template, assigned = _search(some, start, steps, share, unpaired_cost)
        score = misfit(some, template, assigned, unpaired_cost)
        if best is None or score < best[0]:
            best = (score, template)
        if not _overlaps(some, template):
            break
    assert best is not None  # there is always a first start
    template = sort_modes(at_temperature(best[1], reference_temperature))
    if len(some.head) < len(table.head):
        template = _settle(table, template, unpaired_cost)[0]
    return template, assign_all(table, template, unpaired_cost)


def found_share(table: ModeTable, assigned: IntArray, modes: int) -> FloatArray:
    """Return (modes,) share of responses showing each mode, of the head that shows it best."""
    best = np.zeros(modes)
    found = (assigned[:, :, None] == np.arange(modes)).any(axis=1)
    groups = [table.head == h for h in np.unique(table.head)]
    large = [group for group in groups if group.sum() >= 4]
    for group in large or [np.ones(len(table.head), dtype=bool)]:
        best = np.maximum(best, found[group].mean(axis=0))
    return best


def _search(
    table: ModeTable, start: ModeTemplate, steps: IntArray, share: float, unpaired_cost: float
) -> tuple[ModeTemplate, IntArray]:
    """Follow one start outward over temperature to an end where nothing changes."""
    template = start
    for reach in np.unique(steps):
        template = _settle(table.rows(steps <= reach), template, unpaired_cost)[0]
    for _ in range(3):
        template, assigned = _settle(table, template, unpaired_cost)
        changed = _revise(table, template, assigned, share)
        if changed is None:
            break
        template = changed
    template, assigned = _settle(table, template, unpaired_cost)
    keep = found_share(table, assigned, len(template.log_frequency)) >= share
    template = select_modes(template, keep)
    return template, assign_all(table, template, unpaired_cost)


def _sample(table: ModeTable) -> ModeTable:
    """Return at most 2000 responses: enough for medians, drawn once with a fixed seed."""
    count = len(table.head)
    if count <= _MOST_RESPONSES:
        return table
    chosen = np.zeros(count, dtype=bool)
    chosen[np.random.default_rng(0).permutation(count)[:_MOST_RESPONSES]] = True
    return table.rows(chosen)


def _overlaps(table: ModeTable, template: ModeTemplate) -> bool:
    """Whether two neighbouring modes come near each other at any temperature of the campaign."""
    if len(template.log_frequency) < 2:
        return False
    for temperature in np.unique(table.temperature[[*_extremes(table.temperature)]]):
        there = sort_modes(at_temperature(template, float(temperature)))
        reach = np.hypot(there.frequency_spread[1:], there.frequency_spread[:-1])
        if (np.diff(there.log_frequency) < _CLEAR * reach).any():
            return True
    return False


def _extremes(temperature: FloatArray) -> tuple[int, int]:
    return int(np.argmin(temperature)), int(np.argmax(temperature))


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
    position, least = table.log_frequency[left], share / table.heads
    added = density_centres(position, owner, len(left), BANDWIDTH, least)
    if keep.all():
        # A mode that differs much between responses is a group only to a wider kernel.
        for bandwidth in _WIDER:
            if added.size == 0:
                added = density_centres(position, owner, len(left), bandwidth, least)
        if added.size == 0:
            return None
    fresh = blank_template(table, added, template.temperature)
    return sort_modes(join_templates(select_modes(template, keep), fresh))
