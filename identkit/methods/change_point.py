"""Where the mean of a series has changed, and how sure that place is.

Sources: D. V. Hinkley, "Inference about the change-point in a sequence of random variables",
Biometrika 57 (1970) 1-17 (maximum likelihood); K. J. Worsley, "An improved Bonferroni inequality
and applications", Biometrika 69 (1982) 297-302 (chance of so large a difference without a change;
the plain Bonferroni bound is used here); A. F. M. Smith, "A Bayesian approach to inference about a
change-point in a sequence of random variables", Biometrika 62 (1975) 407-416 (confidence of each
place, means and variance unknown). Independent normal points, one step of the mean.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import t

from identkit.methods.arrays import FloatArray, IntArray

_LEAST_POINTS = 4
_MOST_ENDS = 400


@dataclass(frozen=True, eq=False)
class ChangePoint:
    """One step of the mean.

    Attributes
    ----------
    first
        Index of the first point after the change.
    before, after
        Means on its two sides.
    deviation
        Standard deviation of a point around them.
    chance
        Upper bound of the chance of so large a step without a change.
    probability
        (points,) of every index to be the first after the change; sums to 1.
    """

    first: int
    before: float
    after: float
    deviation: float
    chance: float
    probability: FloatArray

    def confidence_set(self, confidence: float = 0.95) -> IntArray:
        """Return the indices that hold the change with the given probability, fewest first."""
        order = np.argsort(self.probability)[::-1]
        enough = int(np.searchsorted(np.cumsum(self.probability[order]), confidence)) + 1
        return np.sort(order[:enough])


def change_point(values: FloatArray, inflation: float = 1.0) -> ChangePoint | None:
    """Return the most likely single step of the mean; None for too few points.

    Parameters
    ----------
    values
        (points,) finite, in order.
    inflation
        Variance of a mean over that of a mean of independent points (autocorrelated points carry
        less information than their number); 1 for independent points.
    """
    count = len(values)
    if count < _LEAST_POINTS or np.ptp(values) == 0.0:
        return None
    left = np.arange(1, count, dtype=float)
    sums = np.cumsum(values)[:-1]
    low, high = sums / left, (values.sum() - sums) / (count - left)
    between = left * (count - left) / count * (high - low) ** 2
    total = float(np.sum((values - values.mean()) ** 2))
    within = np.maximum(total - between, 1e-12 * total)
    best = int(np.argmax(between))
    ratio = np.sqrt(between[best] / within[best] * (count - 2.0) / inflation)
    chance = min(1.0, (count - 1.0) * 2.0 * float(t.sf(ratio, count - 2)))
    weight = -0.5 * np.log(left * (count - left)) - 0.5 * (count - 2) / inflation * np.log(within)
    probability = np.zeros(count)
    probability[1:] = np.exp(weight - weight.max())
    return ChangePoint(
        best + 1,
        float(low[best]),
        float(high[best]),
        float(np.sqrt(within[best] / (count - 2.0))),
        chance,
        probability / probability.sum(),
    )


def mean_segments(
    values: FloatArray, false_alarm: float, inflation: float = 1.0
) -> list[tuple[int, int]]:
    """Split a series wherever its mean has changed, the clearest change first.

    Every split takes out the stretch that differs most from the rest, so that a lot that came and
    went is seen as well as a lasting step: A. B. Olshen, E. S. Venkatraman, R. Lucito and M.
    Wigler, "Circular binary segmentation ...", Biostatistics 5 (2004) 557-572, with Student's t
    and the Bonferroni bound in place of permutations.

    Parameters
    ----------
    values
        (points,) finite.
    false_alarm
        Chance below which a change is believed.
    inflation
        As in `change_point`.

    Returns
    -------
    list
        (first, one past the last) of every segment.
    """

    def split(start: int, stop: int) -> list[tuple[int, int]]:
        low, high, chance = _clearest_stretch(values[start:stop], inflation)
        if chance > false_alarm:
            return [(start, stop)]
        ends = [start, *(e for e in (start + low, start + high) if start < e < stop), stop]
        return [part for a, b in zip(ends[:-1], ends[1:], strict=True) for part in split(a, b)]

    return split(0, len(values))


def _clearest_stretch(values: FloatArray, inflation: float) -> tuple[int, int, float]:
    """Return the stretch whose mean differs most from that of the rest, and a bound of its chance.

    Long series are searched on a coarser raster of ends.
    """
    count = len(values)
    if count < _LEAST_POINTS or np.ptp(values) == 0.0:
        return 0, count, 1.0
    ends = np.unique(np.linspace(0, count, min(count, _MOST_ENDS) + 1).astype(int))
    sums = np.concatenate([[0.0], np.cumsum(values - values.mean())])[ends]
    inside = (ends[None, :] - ends[:, None]).astype(float)
    usable = (inside > 0) & (inside < count)
    size = np.where(usable, inside, 1.0)
    between = (sums[None, :] - sums[:, None]) ** 2 * count / (size * (count - size))
    between = np.where(usable, between, -1.0)
    low, high = np.unravel_index(int(np.argmax(between)), between.shape)
    total = float(np.sum((values - values.mean()) ** 2))
    within = max(total - float(between[low, high]), 1e-12 * total)
    ratio = np.sqrt(between[low, high] / within * (count - 2.0) / inflation)
    chance = 0.5 * count * (count - 1.0) * 2.0 * float(t.sf(ratio, count - 2))
    return int(ends[low]), int(ends[high]), min(1.0, chance)
