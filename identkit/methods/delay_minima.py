"""Other minima over the delay: the final poles scanned again, the best other places refitted.

The cost has many minima over the delay, and the first poles absorb part of a turn. With the final
poles the scan is sharp; each of its other minima is a start of its own.

Source: as `delay_scan`; restarting from the minima of a scan is elementary.
"""

from dataclasses import replace

import numpy as np

from identkit.methods.arrays import FloatArray
from identkit.methods.delay_scan import scan_delay
from identkit.methods.modal_problem import ModalProblem
from identkit.methods.modal_solution import Solution, solve

STARTS = 3
APART = 1.0
BETTER = 1e-6


def best_delay(solution: Solution) -> Solution:
    """Return the best of the solution and its refits from the other minima over the delay.

    Parameters
    ----------
    solution
        A fit with a free delay.
    """
    poles, problem = solution.poles, solution.problem
    delays, costs = scan_delay(problem.data, problem.columns(poles))
    best = solution
    for delay in _minima(delays, costs, poles.delay):
        start = replace(poles, delay=delay)
        trial = solve(ModalProblem(problem.data, solution.shape, delay), start)
        if trial.cost < best.cost * (1.0 - BETTER):
            best = trial
    return best


def _minima(delays: FloatArray, costs: FloatArray, taken: float) -> list[float]:
    """Return the places of the lowest minima away from the one taken, lowest first."""
    padded = np.concatenate([[np.inf], costs, [np.inf]])
    low = np.flatnonzero((costs <= padded[:-2]) & (costs <= padded[2:]))
    low = low[np.abs(delays[low] - taken) > APART]
    return [float(delays[k]) for k in low[np.argsort(costs[low])][:STARTS]]
