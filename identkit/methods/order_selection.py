"""How many modes: forward selection of starting poles, score test to add, Wald test to drop.

* Forward selection (orthogonal least squares) takes from an over-ordered set of poles those that
  reduce chi^2 most, one at a time.
* The score test asks, without refitting, how much chi^2 a further mode at each frequency and
  damping would gain: the residual's projection on the part of its column that the present model's
  tangent space does not hold.
* The Wald test names the mode whose removal costs least.
* The extended Bayesian information criterion settles: chi^2 / scale + parameters ln(reals)
  + 2 modes ln(points), the last because a mode may stand at any of the points.

Sources: S. Chen, S. A. Billings & W. Luo, Int. J. Control 50 (1989) 1873-1896 (orthogonal least
squares); C. R. Rao, Proc. Cambridge Phil. Soc. 44 (1948) 50-57 (score test); G. Schwarz, Ann.
Statist. 6 (1978) 461-464 (information criterion); J. Chen & Z. Chen, Biometrika 95 (2008) 759-771
(extended criterion, with its gamma = 1).
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.compiled_sums import section_rows, window_gains
from identkit.methods.modal_problem import ScaledData, times_jx
from identkit.methods.modal_solution import Solution, information_factor, internal_covariance

DAMPING_LEVELS = (0.002, 0.006, 0.02, 0.06, 0.2)
WINDOW = 12.0
SHORTLIST = 12
LISTED = 6
NEIGHBOURS = ((-3.0, 1.0), (-1.5, 1.0), (-0.7, 1.0), (0.7, 1.0), (1.5, 1.0), (3.0, 1.0), (0.0, 2.0))


@dataclass(frozen=True)
class Candidate:
    """A mode that might be added, and the decrease of chi^2 its residue alone would bring."""

    log_frequency: float
    log_damping: float
    gain: float


def information_criterion(
    cost: float, scale: float, parameters: int, modes: int, points: int
) -> float:
    """Return chi^2 over the noise scale plus the price of parameters and of places of modes."""
    price = parameters * np.log(2.0 * points) + 2.0 * modes * np.log(points)
    return cost / scale + float(price)


def forward_selection(
    rows: FloatArray,
    target: FloatArray,
    forced: int,
    groups: IntArray,
    *,
    threshold: float,
    count: int | None,
) -> list[int]:
    """Return the groups of columns taken, best first.

    Parameters
    ----------
    rows
        (columns, 2F); the first `forced` are always in.
    target
        (2F,) data.
    forced
        Number of columns always in.
    groups
        (columns - forced,) group of each further column; a group is taken whole.
    threshold
        Smallest decrease of chi^2 worth a group.
    count
        Number of groups to take, or None: until the threshold.
    """
    scale = 1.0 / np.maximum(np.linalg.norm(rows, axis=1), 1e-300)
    gram = (rows @ rows.T) * scale[:, None] * scale
    right = (rows @ target) * scale
    for k in range(forced):
        _sweep(gram, right, k)
    taken: list[int] = []
    members = {int(g): forced + np.flatnonzero(groups == g) for g in np.unique(groups)}
    while members and (count is None or len(taken) < count):
        gains = {g: _group_gain(gram, right, part) for g, part in members.items()}
        best = max(gains, key=lambda g: gains[g])
        if count is None and gains[best] < threshold:
            break
        for column in members.pop(best):
            _sweep(gram, right, int(column))
        taken.append(best)
    return taken


def _sweep(gram: FloatArray, right: FloatArray, k: int) -> None:
    pivot = gram[k, k]
    if pivot < 1e-10:
        return
    share = gram[:, k] / pivot
    right -= share * right[k]
    gram -= np.outer(share, gram[k])


def _group_gain(gram: FloatArray, right: FloatArray, part: IntArray) -> float:
    block = gram[np.ix_(part, part)]
    if np.min(np.diag(block)) < 1e-8:
        return 0.0
    return float(right[part] @ np.linalg.lstsq(block, right[part], rcond=1e-10)[0])


def wald_statistics(solution: Solution) -> FloatArray:
    """Return (modes,) the squared residue over its variance, both residue and rate if general."""
    shape = solution.shape
    covariance, _ = internal_covariance(solution)
    first = int(shape.feedthrough) + (shape.base == "free")
    out = np.zeros(shape.modes)
    for k in range(shape.modes):
        part = [first + shape.sections - shape.modes + k]
        part += [first + shape.sections + k] if shape.general else []
        block, value = covariance[np.ix_(part, part)], solution.state.coefficients[part]
        size = np.sqrt(np.maximum(np.diag(block), 1e-300))
        scaled = np.linalg.lstsq(block / np.outer(size, size), value / size, rcond=1e-12)[0]
        out[k] = float(value / size @ scaled)
    return out


def score_test(solution: Solution) -> list[Candidate]:
    """Return candidates for a further mode, best first, by their decrease of chi^2."""
    data = solution.problem.data
    places = np.concatenate([_shortlist(data, solution), _near_modes(solution)])
    places = places[np.exp(places[:, 0]) < 1.2]
    gains = _projected_gains(solution, places)
    chosen: list[Candidate] = []
    for k in np.argsort(-gains):
        new = Candidate(float(places[k, 0]), float(places[k, 1]), float(gains[k]))
        if all(_apart(new, one) for one in chosen):
            chosen.append(new)
        if len(chosen) == LISTED:
            break
    return chosen


def _apart(new: Candidate, old: Candidate) -> bool:
    narrow = np.exp(min(new.log_damping, old.log_damping))
    return abs(new.log_frequency - old.log_frequency) > 0.5 * float(narrow)


def candidate_grid(x: FloatArray) -> FloatArray:
    """Return (candidates, 2) frequency and damping ratio: on the grid, not closer than resolved."""
    places = []
    for damping in DAMPING_LEVELS:
        cell = np.floor(np.log(np.maximum(x, 1e-300)) / damping)
        first = np.flatnonzero(np.diff(cell, prepend=cell[0] - 1.0))
        places.append(np.column_stack([x[first], np.full(first.size, damping)]))
    return np.concatenate(places)


def _shortlist(data: ScaledData, solution: Solution) -> FloatArray:
    """Best local maxima of the gain over the whole band, tangent space not yet taken out."""
    grid = candidate_grid(data.x)
    reach = WINDOW * grid[:, 1] * grid[:, 0]
    low = np.searchsorted(data.x, grid[:, 0] - reach)
    high = np.searchsorted(data.x, grid[:, 0] + reach, side="right")
    gains = np.empty(len(grid))
    window_gains(
        data.x, data.weight, solution.state.residual, grid[:, 0] ** 2,
        2.0 * grid[:, 1] * grid[:, 0], low, high, solution.shape.general, gains,
    )  # fmt: skip
    chosen: list[int] = []
    for k in np.argsort(-gains):
        apart = [abs(np.log(grid[k, 0] / grid[j, 0])) > grid[j, 1] for j in chosen]
        if all(apart):
            chosen.append(int(k))
        if len(chosen) == SHORTLIST:
            break
    return np.log(grid[chosen])


def _near_modes(solution: Solution) -> FloatArray:
    poles = solution.poles
    damping = np.exp(poles.log_damping)
    places = [
        np.column_stack([
            poles.log_frequency + shift * np.minimum(damping, 0.3),
            poles.log_damping + np.log(widen) * np.ones_like(damping),
        ])
        for shift, widen in NEIGHBOURS
    ]  # fmt: skip
    return np.concatenate(places).reshape(-1, 2)


def _projected_gains(solution: Solution, places: FloatArray) -> FloatArray:
    data = solution.problem.data
    natural, damping = np.exp(places[:, 0]), np.exp(places[:, 1])
    rows = np.empty((len(places), 2 * data.x.size))
    section_rows(data.x, data.weight, natural**2, 2.0 * damping * natural, rows)
    base, factor, scale = information_factor(solution)
    residual = solution.state.residual
    first = _left_over(rows, base, factor, scale)
    gain = (first @ residual) ** 2 / _energy(first, rows)
    if solution.shape.general:
        slopes = times_jx(rows, data.x)
        second = _left_over(slopes, base, factor, scale)
        share = np.sum(first * second, axis=1) / _energy(first, rows)
        second -= share[:, None] * first
        gain += (second @ residual) ** 2 / _energy(second, slopes)
    return np.asarray(gain, dtype=float)


def _left_over(
    rows: FloatArray, base: FloatArray, factor: FloatArray, scale: FloatArray
) -> FloatArray:
    """Take the tangent space of the present model out of rows."""
    half = solve_triangular(factor, (base @ rows.T) * scale[:, None], lower=True)
    inner = solve_triangular(factor, half, lower=True, trans="T") * scale[:, None]
    return np.asarray(rows - inner.T @ base, dtype=float)


def _energy(left: FloatArray, whole: FloatArray) -> FloatArray:
    """Energy of what is left, infinite where rounding is all that is left."""
    energy = np.sum(left**2, axis=1)
    return np.where(energy > 1e-9 * np.sum(whole**2, axis=1), energy, np.inf)
