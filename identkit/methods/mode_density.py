"""Mode-density clustering: how many modes a population has and about where.

Source: E. Parzen, "On estimation of a probability density function and mode", Annals of
Mathematical Statistics 33 (1962) 1065-1076 (kernel density); valleys of the density of all
fitted modes on a log-frequency axis split them into groups, and the commonest count of modes
per response inside a group says how many modes the group holds.
"""

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray


def split_by_density(position: FloatArray, bandwidth: float, floor: float) -> IntArray:
    """Split points into groups where their kernel density falls below a floor (Parzen 1962).

    Parameters
    ----------
    position
        (points,) ascending positions, here log frequency.
    bandwidth
        Standard deviation of the Gaussian kernel, in the unit of position.
    floor
        Density, in points per bandwidth, below which neighbouring points are cut apart.

    Returns
    -------
    IntArray
        (points,) group of each point, ascending from 0.
    """
    if position.size == 0:
        return np.zeros(0, dtype=np.int64)
    step = 0.5 * bandwidth
    cells = int(np.ceil((position[-1] - position[0]) / step)) + 1
    counts = np.bincount(((position - position[0]) / step).astype(np.int64), minlength=cells)
    reach = np.arange(-8, 9)
    kernel = np.exp(-0.5 * (reach * step / bandwidth) ** 2)
    density = np.convolve(counts, kernel / kernel.sum(), mode="full")[8 : 8 + cells] * 2.0
    thin = np.concatenate([[0], np.cumsum(density < floor)])
    cell = ((position - position[0]) / step).astype(np.int64)
    # Two neighbours part where a thin cell lies strictly between their own cells.
    between = thin[cell[1:]] - thin[np.minimum(cell[:-1] + 1, cell[1:])]
    return np.concatenate([[0], np.cumsum(between > 0)]).astype(np.int64)


def density_centres(
    log_frequency: FloatArray, response: IntArray, responses: int, bandwidth: float, share: float
) -> FloatArray:
    """Return start values of the population's log frequencies.

    Parameters
    ----------
    log_frequency
        (points,) log frequencies of all fitted modes of all responses.
    response
        (points,) response each belongs to.
    responses
        Number of responses.
    bandwidth
        Width of the density kernel in log frequency.
    share
        Smallest share of the responses that a group must appear in; two of them at the least,
        where there are two.

    Returns
    -------
    FloatArray
        (modes,) ascending centres: per group the medians of the ordered frequencies over the
        responses that show the group's commonest count of modes.
    """
    order = np.argsort(log_frequency, kind="stable")
    position, owner = log_frequency[order], response[order]
    # Cut where a bandwidth holds fewer modes than 2 % of the responses would put there.
    group = split_by_density(position, bandwidth, max(0.02 * responses, 0.2))
    centres: list[FloatArray] = []
    for g in range(int(group[-1]) + 1 if group.size else 0):
        centres.append(_group_centres(position[group == g], owner[group == g], responses, share))
    return np.sort(np.concatenate(centres)) if centres else np.zeros(0)


def _group_centres(
    position: FloatArray, owner: IntArray, responses: int, share: float
) -> FloatArray:
    counts = np.bincount(owner, minlength=responses)
    seen = counts[counts > 0]
    if len(seen) < max(share * responses, min(2, responses)):
        return np.zeros(0)
    tally = np.bincount(seen)
    many = int(np.flatnonzero(tally == tally.max())[-1])
    typical = np.flatnonzero(counts == many)
    table = np.array([np.sort(position[owner == i]) for i in typical])
    return np.asarray(np.median(table, axis=0), dtype=float)
