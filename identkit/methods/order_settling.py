"""Settle the number of modes of a fit: drop, add, refit, compare, until nothing improves.

Score and Wald tests propose (see `order_selection`), a refit and the information criterion decide.
The unit of chi^2 is the noise scale: 1 where residuals agree with the stated variance, else the
residual variance of an over-ordered fit, so that data which do not follow the model do not collect
modes without end.

Source: as `order_selection`.
"""

from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray
from identkit.methods.modal_problem import ModalProblem, ModelShape, Poles
from identkit.methods.modal_solution import Solution, solve
from identkit.methods.order_selection import (
    Candidate,
    information_criterion,
    score_test,
    wald_statistics,
)

MODE_CAP = 24
WIDEST = 1.5
TRIALS = 3


@dataclass(frozen=True)
class Request:
    """What the caller asked for."""

    base: str
    modes: int | None
    delay: bool
    general: bool
    feedthrough: bool

    def shape(self, modes: int) -> ModelShape:
        """Return the model with that many modes."""
        return ModelShape(self.base, modes, self.general, self.feedthrough, self.delay)


def mode_cap(points: int) -> int:
    """Return the largest automatic number of modes."""
    return max(1, min(MODE_CAP, points // 10))


def mode_price(request: Request, points: int) -> float:
    """Return the decrease of chi^2 that one more mode must bring."""
    parameters = 4 if request.general else 3
    return parameters * float(np.log(2.0 * points)) + 2.0 * float(np.log(points))


def settle(solution: Solution, request: Request, scale: float) -> Solution:
    """Drop and add modes until the information criterion rests (or the number asked for)."""
    solution = _without_stray(solution)
    for _ in range(2 * MODE_CAP):
        solution = with_leading_pivot(solution)
        changed = (
            _dropped(solution, request, scale)
            or _resplit(solution)
            or _added(solution, request, scale)
        )
        if changed is None:
            return solution
        solution = changed
    return solution


def with_leading_pivot(solution: Solution) -> Solution:
    """Name pivot the section of largest static deflection, if the search ended otherwise."""
    shape, poles = solution.shape, solution.poles
    if shape.base != "pivot" or shape.modes == 0:
        return solution
    first = int(shape.feedthrough)
    residue = solution.state.coefficients[first : first + shape.sections]
    order = leading_first(residue, poles)
    if order[0] == 0:
        return solution
    poles = Poles(poles.delay, poles.log_frequency[order], poles.log_damping[order])
    return solve(solution.problem, poles)


def leading_first(residue: FloatArray, poles: Poles) -> list[int]:
    """Order sections with the resonance of largest static deflection first; trends do not lead."""
    static = np.abs(residue) / poles.stiffness
    static[poles.log_damping > np.log(WIDEST)] = 0.0
    lead = int(np.argmax(static))
    return [lead, *(k for k in range(static.size) if k != lead)]


def improves(trial: Solution, solution: Solution, scale: float) -> bool:
    """Return whether the extended information criterion prefers `trial` over `solution`."""
    points = solution.problem.data.x.size
    best = min(trial, solution, key=lambda one: one.cost)
    noise = best.cost / max(2 * points - best.shape.parameters, 1)
    noise = max(1.0, min(scale, noise))
    first, second = (
        information_criterion(one.cost, noise, one.shape.parameters, one.shape.modes, points)
        for one in (trial, solution)
    )
    return first < second


def _dropped(solution: Solution, request: Request, scale: float) -> Solution | None:
    modes = solution.shape.modes
    if modes <= (request.modes or 0):
        return None
    wald = wald_statistics(solution)
    weakest = np.argsort(wald)
    if request.modes is not None:
        return resized(solution, drop=int(weakest[0]))
    price = mode_price(request, solution.problem.data.x.size) * scale
    for k in weakest[wald[weakest] < price][: 2 * TRIALS]:
        trial = resized(solution, drop=int(k))
        if improves(trial, solution, scale):
            return trial
    return None


def _added(solution: Solution, request: Request, scale: float) -> Solution | None:
    points, modes = solution.problem.data.x.size, solution.shape.modes
    most = mode_cap(points) if request.modes is None else request.modes
    if modes >= most or 2 * points <= request.shape(modes + 1).parameters + 4:
        return None
    for candidate in score_test(solution)[:TRIALS]:
        if request.modes is None and candidate.gain < _entry(solution, request):
            return None
        trial = _without_stray(resized(solution, add=candidate))
        if trial.shape.modes > modes and (
            request.modes is not None or improves(trial, solution, scale)
        ):
            return trial
    return None


def _resplit(solution: Solution) -> Solution | None:
    """Pull apart two modes that fell on one another, where that lowers the cost."""
    first = solution.shape.sections - solution.shape.modes
    frequency, damping = solution.poles.log_frequency, solution.poles.log_damping
    order = first + np.argsort(frequency[first:])
    gap = np.diff(frequency[order])
    width = np.exp(np.minimum(damping[order[:-1]], damping[order[1:]]))
    for k in np.flatnonzero(gap < 0.3 * width):
        low, high = order[k], order[k + 1]
        moved, narrowed = frequency.copy(), damping.copy()
        middle = 0.5 * (frequency[low] + frequency[high])
        moved[[low, high]] = middle - 0.7 * width[k], middle + 0.7 * width[k]
        narrowed[[low, high]] -= np.log(2.0)
        trial = solve(solution.problem, Poles(solution.poles.delay, moved, narrowed))
        if trial.cost < solution.cost - 1.0:
            return trial
    return None


def _entry(solution: Solution, request: Request) -> float:
    """Gain of the residue alone worth a refit: part of the price, the poles still move."""
    points = solution.problem.data.x.size
    return 0.5 * mode_price(request, points)


def resized(
    solution: Solution, *, drop: int | None = None, add: Candidate | None = None
) -> Solution:
    """Refit with one mode fewer or one more."""
    poles, shape = solution.poles, solution.shape
    frequency, damping = poles.log_frequency, poles.log_damping
    if drop is not None:
        index = shape.sections - shape.modes + drop
        frequency, damping = np.delete(frequency, index), np.delete(damping, index)
    if add is not None:
        frequency = np.append(frequency, add.log_frequency)
        damping = np.append(damping, add.log_damping)
    changed = replace(shape, modes=shape.modes + (add is not None) - (drop is not None))
    problem = ModalProblem(solution.problem.data, changed, poles.delay)
    return solve(problem, Poles(poles.delay, frequency, damping))


def _without_stray(solution: Solution) -> Solution:
    """Drop modes that left the band by far, became a trend, or sit on a single point."""
    while solution.shape.modes:
        stray = np.flatnonzero(_stray(solution))
        if stray.size == 0:
            return solution
        solution = resized(solution, drop=int(stray[0]))
    return solution


def _stray(solution: Solution) -> BoolArray:
    shape, x = solution.shape, solution.problem.data.x
    first = shape.sections - shape.modes
    natural = np.exp(solution.poles.log_frequency[first:])
    damping = np.exp(solution.poles.log_damping[first:])
    place = np.clip(np.searchsorted(x, natural), 1, x.size - 1)
    spacing = x[place] - x[place - 1]
    outside = (natural > 1.3) | (natural < 0.7 * x[0])
    spike = 2.0 * damping * natural < 0.1 * spacing
    return np.asarray(outside | (damping > WIDEST) | spike, dtype=np.bool_)
