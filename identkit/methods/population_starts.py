"""Starts for the search of a population's modes.

Sources: E. Parzen, "On estimation of a probability density function and mode", Annals of
Mathematical Statistics 33 (1962) 1065-1076 (centres from the density of fitted modes,
mode_density.py); L. Kaufman and P. J. Rousseeuw, *Finding Groups in Data*, 1990 (one real
observation, the medoid, as a start: here the response nearest to the centres).
"""

from collections.abc import Iterator

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.mode_density import density_centres
from identkit.methods.mode_template import (
    LEAST_DAMPING_SPREAD,
    LEAST_RESIDUE_SPREAD,
    ModeTable,
    ModeTemplate,
    blank_template,
    template_from,
)

BANDWIDTH = 0.004
_LEVEL = 5.0  # K, responses closer than this share a temperature level
_MOST_LEVELS = 5
_FEWEST = 5


def starts(table: ModeTable, share: float) -> Iterator[tuple[ModeTemplate, IntArray]]:
    """Yield start templates, the likeliest first, each with the order to take responses in.

    Parameters
    ----------
    table
        Fitted modes of all responses.
    share
        Smallest share of the responses of a population mode; a start asks for half of it.

    Yields
    ------
    tuple
        A template that holds at one temperature level, and (responses,) steps counted outward
        from that level. First centres alone, from the commonest level; then for every level the
        one response nearest to its centres, with its damping ratios and residues, and the
        centres of the other levels.
    """
    level = temperature_level(table.temperature)
    names, counts = np.unique(level, return_counts=True)
    order = names[np.lexsort((np.abs(names), -counts))]
    large = [n for n in order if (level == n).sum() >= _FEWEST] or [order[0]]
    for rank, name in enumerate(large[:_MOST_LEVELS]):
        here = level == name
        steps = _steps(np.abs(level - name))
        template = _from_density(table, here, share)
        if rank == 0:
            yield template, steps
        medoid = _from_medoid(table, here, template)
        if medoid is not None:
            yield medoid, steps
        if rank > 0:
            yield template, steps


def temperature_level(temperature: FloatArray) -> IntArray:
    """Return the temperature level of each response, 0 at the median."""
    return np.round((temperature - np.median(temperature)) / _LEVEL).astype(np.int64)


def _steps(away: IntArray) -> IntArray:
    """Count levels outward, in at most five steps."""
    ranks = np.searchsorted(np.unique(away), away)
    most = max(int(ranks.max()), 1)
    return np.asarray(np.ceil(ranks * min(5, most) / most), dtype=np.int64)


def _from_density(table: ModeTable, here: BoolArray, share: float) -> ModeTemplate:
    frequency = table.log_frequency[here]
    known = np.isfinite(frequency)
    owner = np.broadcast_to(np.arange(len(known))[:, None], known.shape)[known]
    centres = density_centres(frequency[known], owner, len(known), BANDWIDTH, 0.5 * share)
    return blank_template(table, centres, float(np.median(table.temperature[here])))


def _from_medoid(table: ModeTable, here: BoolArray, around: ModeTemplate) -> ModeTemplate | None:
    """Return a template of the response nearest to the centres, of as many modes; None if none."""
    modes = len(around.log_frequency)
    count = np.isfinite(table.log_frequency).sum(axis=1)
    rows = np.flatnonzero(here & (count == modes))
    if modes == 0 or rows.size == 0:
        return None
    ordered = np.sort(table.log_frequency[rows], axis=1)[:, :modes]
    apart = np.abs(ordered - around.log_frequency)
    nearest = int(rows[np.argmin(apart.max(axis=1))])
    places = np.argsort(table.log_frequency[nearest], kind="stable")[:modes]
    return template_from(
        blank_template(table, table.log_frequency[nearest, places], around.temperature),
        int(table.head[nearest]),
        table.log_damping[nearest, places],
        2.0 * LEAST_DAMPING_SPREAD,
        table.residue[nearest, places],
        3.0 * LEAST_RESIDUE_SPREAD,
    )
