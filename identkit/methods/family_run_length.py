"""Limits of many charts watched together, from one in-control run length of all of them.

Sources: Z. Šidák, "Rectangular confidence regions for the means of multivariate normal
distributions", Journal of the American Statistical Association 62 (1967) 626-633; T. Royen, "A
simple proof of the Gaussian correlation conjecture extended to some multivariate gamma
distributions", Far East Journal of Theoretical Statistics 48 (2014) 139-145.

"No signal up to point t" is a convex set, symmetric about zero, of the points of a two-sided chart
of individuals, of running group means, an EWMA, a CUSUM or a multivariate EWMA. For normal points
the chance of several such sets together is at least the product of their chances, however the
series and the charts depend on each other (Royen 2014; for single intervals Šidák 1967). Limits
solved for the product therefore give a run length of at least what is stated.
"""

import functools
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from identkit.methods.arrays import FloatArray
from identkit.methods.cusum_run_length import cusum_chain, cusum_limit
from identkit.methods.ewma_run_length import ewma_chain, ewma_limit
from identkit.methods.multivariate_ewma_run_length import (
    multivariate_ewma_chain,
    multivariate_ewma_limit,
)
from identkit.methods.shewhart_individuals import individuals_limit, individuals_survival

_EXACT_POINTS = 400  # beyond them every chart's chance of going on is constant


@dataclass(frozen=True)
class ChartFamily:
    """What is watched together.

    Attributes
    ----------
    series
        Number of series, each on a chart of individuals, one of running group means (standard
        normal at every point, same limit), an EWMA and a two-sided CUSUM.
    joint_series
        Number of series in the multivariate EWMA; 0 for none.
    ewma_weight, joint_weight
        Weights of the newest point.
    cusum_reference
        Allowance k in standard deviations.
    """

    series: int
    joint_series: int = 0
    ewma_weight: float = 0.2
    joint_weight: float = 0.1
    cusum_reference: float = 0.5

    @property
    def charts(self) -> int:
        """Number of charts."""
        return 4 * self.series + (self.joint_series > 0)


@dataclass(frozen=True)
class FamilyLimits:
    """Limits of all charts of a family.

    Attributes
    ----------
    individuals
        Standard deviations of a point, and of a running group mean.
    ewma
        Asymptotic standard deviations of the average.
    cusum
        h, standard deviations of a point.
    joint
        Of T2; infinite where there is no multivariate chart.
    each
        In-control average run length of every single chart, points.
    together
        That of all charts together, at least, points.
    """

    individuals: float
    ewma: float
    cusum: float
    joint: float
    each: float
    together: float


@functools.lru_cache(maxsize=64)
def family_limits(family: ChartFamily, run_length: float) -> FamilyLimits:
    """Solve the limits of all charts, each with the same run length of its own.

    Parameters
    ----------
    family
        What is watched together.
    run_length
        Points; in-control average run length until the first of all charts signals.

    Raises
    ------
    ValueError
        If the run length is too short for any limit.
    """
    charts = family.charts + family.series  # a CUSUM counts twice: it has two sides
    low, high = np.log(max(2.0, 0.3 * run_length)), np.log(3.0 * charts * run_length + 10.0)

    def excess(log_single: float) -> float:
        limits = _limits(family, float(np.exp(log_single)))
        return float(np.log(_together(limits, family) / run_length))

    each = float(np.exp(brentq(excess, low, high, xtol=1e-6)))
    limits = _limits(family, each)
    return FamilyLimits(*limits, each, _together(limits, family))


def _limits(family: ChartFamily, each: float) -> tuple[float, float, float, float]:
    joint = np.inf
    if family.joint_series:
        joint = multivariate_ewma_limit(family.joint_series, family.joint_weight, each)
    return (
        individuals_limit(each),
        ewma_limit(family.ewma_weight, each),
        cusum_limit(family.cusum_reference, each),
        joint,
    )


def _together(limits: tuple[float, float, float, float], family: ChartFamily) -> float:
    """Return the run length of the product of the charts' chances of not having signalled."""
    individuals, moving, sums, joint = limits
    points = _EXACT_POINTS
    chance = individuals_survival(individuals, points) ** 2
    chance = chance * ewma_chain(family.ewma_weight, moving).survival(points)
    # Both sums seldom near their limits together: Kemp's rule for the two sides says the same.
    chance = chance * cusum_chain(family.cusum_reference, sums).survival(points) ** 2
    chance = chance**family.series
    if family.joint_series:
        chain = multivariate_ewma_chain(family.joint_series, family.joint_weight, joint)
        chance = chance * chain.survival(points)
    return _mean(chance)


def _mean(chance: FloatArray) -> float:
    """Sum the chances of going on; a geometric tail after the last."""
    last, ratio = chance[-1], chance[-1] / max(chance[-2], np.finfo(float).tiny)
    return float(chance[:-1].sum() + last / max(1.0 - ratio, np.finfo(float).tiny))
