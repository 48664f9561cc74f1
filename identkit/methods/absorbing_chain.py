"""Run length of a control chart as the time to absorption of a Markov chain.

Source: D. Brook and D. A. Evans, "An approach to the probability distribution of cusum run length",
Biometrika 59 (1972) 539-549. Where the chart's statistic is continuous, the chain is the
collocation of its integral equation at quadrature nodes (E. J. Nyström, "Über die praktische
Auflösung von Integralgleichungen ...", Acta Mathematica 54 (1930) 185-204), which converges far
faster in the number of states.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from identkit.methods.arrays import FloatArray


@dataclass(frozen=True, eq=False)
class AbsorbingChain:
    """Transitions among the states in which a chart has not signalled.

    Attributes
    ----------
    first
        (states,) from the start of the chart to each state, by the first point.
    between
        (states, states) from row to column, by one further point; what is missing from a row's
        sum to 1 is the chance of a signal.
    """

    first: FloatArray
    between: FloatArray

    def average(self) -> float:
        """Return the average run length, in points up to and including the signal."""
        states = np.eye(len(self.first)) - self.between
        return float(1.0 + self.first @ np.linalg.solve(states, np.ones(len(self.first))))

    def survival(self, points: int) -> FloatArray:
        """Return (points + 1,) chance of no signal in the first 0, 1, 2 ... points."""
        chance = np.ones(points + 1)
        row = self.first.copy()
        for at in range(1, points + 1):
            chance[at] = row.sum()
            row = row @ self.between
        return np.minimum(chance, 1.0)


def legendre_nodes(low: float, high: float, count: int) -> tuple[FloatArray, FloatArray]:
    """Return nodes and weights of Gauss-Legendre quadrature between two ends."""
    nodes, weights = np.polynomial.legendre.leggauss(count)
    half = 0.5 * (high - low)
    return low + half * (nodes + 1.0), half * weights


def solve_limit(
    run_length: Callable[[float], float], wanted: float, low: float, high: float
) -> float:
    """Return the limit at which an increasing average run length takes the wanted value.

    Parameters
    ----------
    run_length
        Average run length (points) of a limit.
    wanted
        Points; more than the run length at `low`.
    low, high
        Limits to search between; `high` is raised until it is enough.

    Raises
    ------
    ValueError
        If the wanted run length is not above that of the lowest limit.
    """
    target = np.log(wanted)
    if np.log(run_length(low)) >= target:
        raise ValueError(
            f"found a run length of {wanted:g}; expected more than {run_length(low):g}"
        )
    while np.log(run_length(high)) < target:
        low, high = high, 1.3 * high
    return float(brentq(lambda limit: np.log(run_length(limit)) - target, low, high, xtol=1e-10))
