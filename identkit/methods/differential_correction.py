"""Best ratio of two polynomials between a lower and an upper bound, with a proof of optimality.

Minimise t such that lower <= N/D <= min(t upper, ceiling) at every point. For fixed t that is
linear in the coefficients, and the largest margin z of its rows, scaled by the previous N and D,
gives the next pair: the differential correction method. Points enter the linear programs only
where they are violated.

Sources: I. Barrodale, M. J. D. Powell, F. D. K. Roberts, "The differential correction algorithm
for rational l-infinity approximation", SIAM J. Numer. Anal. 9(3), 493-504, 1972; J.-P. Crouzeix,
J. A. Ferland, S. Schaible, "An algorithm for generalized fractional programs", J. Optim. Theory
Appl. 47(1), 35-49, 1985 (the same with one-sided rows).
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arnoldi_basis import ArnoldiBasis, arnoldi_basis
from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.infeasibility_certificate import proves_infeasible
from identkit.methods.margin_program import HardRows, hard_matrix, largest_margin

MAX_PROGRAMS = 150
CEILING_SLACK = 1e-9
MOMENTUM = 1.0
NEARLY_COMMON = 0.5
SOLVER_NOISE = 1e-9


@dataclass(frozen=True)
class RatioBounds:
    """What the ratio N/D has to keep, point by point.

    Attributes
    ----------
    x
        (points,) abscissae in [-1, 1].
    lower
        (points,) N/D is at least this; 0 asks for nothing.
    upper
        (points,) N/D is at most t times this; inf asks for nothing.
    ceiling
        (points,) N/D is at most this, whatever t; inf asks for nothing.
    measure
        (points,) weights of the inner product; 0 at points that only constrain.
    """

    x: FloatArray
    lower: FloatArray
    upper: FloatArray
    ceiling: FloatArray
    measure: FloatArray

    def limit(self, level: float) -> FloatArray:
        """Return the upper bound at this level t."""
        return np.minimum(level * self.upper, self.ceiling)

    @property
    def least_level(self) -> float:
        """Level below which the bounds cross at some point."""
        return float((self.lower / self.upper).max())

    def normalised(self, ratio: FloatArray) -> tuple[float, float]:
        """Return the factor that makes `ratio` touch the lower bound, and the level it reaches.

        The level is inf where the ceiling is broken.
        """
        factor = float((self.lower / ratio).max())
        if np.any(factor * ratio > self.ceiling * (1.0 + CEILING_SLACK)):
            return factor, np.inf
        return factor, factor * float((ratio / self.upper).max())


@dataclass(frozen=True)
class Ratio:
    """A pair N, D: values at the points, and coefficients in the bases they were found in.

    Attributes
    ----------
    numerator, denominator
        (points,) positive values; together scaled so that N/D touches the lower bound.
    level
        max of N / (D upper) over the points.
    bases, coefficients
        Of N and of D.
    """

    numerator: FloatArray
    denominator: FloatArray
    level: float
    bases: tuple[ArnoldiBasis, ArnoldiBasis]
    coefficients: tuple[FloatArray, FloatArray]


@dataclass(frozen=True)
class Search:
    """Outcome of a search.

    Attributes
    ----------
    best
        The pair of lowest level found; None if none was found that keeps bounds and hard rows.
    floor
        Proven lower bound on the level of any pair without hard rows (0 where nothing is proven).
    settled
        False if the search stopped without reaching its tolerance.
    deciding
        Index of the point with the largest multiplier among the upper rows of the proof, or -1.
    programs
        Number of linear programs solved.
    """

    best: Ratio | None
    floor: float
    settled: bool
    deciding: int
    programs: int


@dataclass(frozen=True)
class _Scaled:
    """Bases made with the previous pair as weights."""

    bases: tuple[ArnoldiBasis, ArnoldiBasis]
    values: tuple[FloatArray, FloatArray]
    numerator: FloatArray
    denominator: FloatArray


@dataclass(frozen=True)
class _Solution:
    coefficients: tuple[FloatArray, FloatArray]
    margin: float
    proven: bool
    deciding: int


def constant_ratio(bounds: RatioBounds) -> Ratio:
    """Return the best constant ratio: the largest lower bound."""
    ones = np.ones(bounds.x.size)
    factor, level = bounds.normalised(ones)
    basis = ArnoldiBasis(np.zeros((1, 0)), 1.0)
    return Ratio(factor * ones, ones, level, (basis, basis), (factor * np.ones(1), np.ones(1)))


def lower_ratio(
    bounds: RatioBounds,
    order: int,
    start: tuple[FloatArray, FloatArray],
    *,
    tolerance: float,
    initial: Ratio | None = None,
    stop_level: float = 0.0,
    hard: HardRows | None = None,
    most_programs: int = MAX_PROGRAMS,
) -> Search:
    """Lower the level of a ratio of polynomials by differential correction until it is proven best.

    Parameters
    ----------
    bounds
        What the ratio keeps.
    order
        Degree of numerator and denominator, at least 1.
    start
        Positive values at the points of the N and D that weight the first step; they need not
        keep the bounds.
    tolerance
        Relative gap between level and proven floor at which the search ends.
    initial
        A pair known to keep bounds and hard rows, to be improved on.
    stop_level
        End as soon as a pair at or below this level is found.
    hard
        Further conditions; the floor then refers to the problem with them.
    most_programs
        Number of linear programs after which the search gives up.

    Returns
    -------
    Search
        Best pair, floor and how it ended.

    """
    descent = _Descent(bounds, order, start, initial, hard or HardRows())
    return descent.run(tolerance, stop_level, most_programs)


class _Descent:
    """The loop of `lower_ratio`: working set, weights, best pair."""

    def __init__(
        self,
        bounds: RatioBounds,
        order: int,
        start: tuple[FloatArray, FloatArray],
        initial: Ratio | None,
        hard: HardRows,
    ) -> None:
        self.bounds, self.order, self.hard, self.best = bounds, order, hard, initial
        self.lower_rows = self.upper_rows = _first_rows(bounds, order)
        self.target = _level_without_ceiling(bounds, start[0] / start[1])
        factor = bounds.normalised(start[0] / start[1])[0]
        self.scaled = _scale(bounds, order, factor * start[0], start[1])
        self.floor, self.deciding, self.reach = bounds.least_level, -1, 0.0

    def run(self, tolerance: float, stop_level: float, most_programs: int) -> Search:
        stalled = 0
        for count in range(most_programs):
            if self.best and self.best.level <= max(stop_level, self.floor * (1.0 + tolerance)):
                return Search(self.best, self.floor, True, self.deciding, count)
            if self.floor > stop_level > 0.0 or stalled > 3:
                break
            stalled = 0 if self._step(tolerance) else stalled + 1
        return Search(self.best, self.floor, False, self.deciding, count)

    def _step(self, tolerance: float) -> bool:
        """Solve one program and take what it brings; false if it brought nothing."""
        level = min(self.best.level, self.target) if self.best else self.target
        lowest = max(self.bounds.least_level, (level * self.floor) ** 0.5)
        probe = max(level / (1.0 + max(0.8 * tolerance, self.reach)), lowest)
        if level / probe < 1.0 + 0.8 * tolerance:
            probe = max(level / (1.0 + 0.8 * tolerance), self.bounds.least_level)
        solution = self._solve(probe)
        if solution is None:
            return False
        raised = solution.proven and probe > self.floor
        if raised:
            self.floor, self.deciding = probe, solution.deciding
        accepted = self._accept(solution)
        self._set_reach(level, solution)
        if solution.proven and self.best is None:
            self.target *= 1.0 + 10.0 * tolerance
        return self._add_violated(solution, probe) or accepted or raised

    def _set_reach(self, level: float, solution: _Solution) -> None:
        """Reach as far below the best as the last gain, less after a program without solution."""
        gain = level / self.best.level - 1.0 if self.best else 0.0
        if solution.margin > 0.0:
            self.reach = min(0.25 * self.reach, gain)
        elif gain > 0.0:
            self.reach = MOMENTUM * gain

    def _solve(self, level: float) -> _Solution | None:
        numerator, denominator = self.scaled.values
        ratio = self.scaled.numerator / self.scaled.denominator
        i, j = self.lower_rows, self.upper_rows
        low, high = _row_factors(ratio, self.bounds.lower, self.bounds.limit(level))
        soft = np.vstack(
            [
                np.hstack([-numerator[i] * low[1][i, None], denominator[i] * low[0][i, None]]),
                np.hstack([numerator[j] * high[1][j, None], -denominator[j] * high[0][j, None]]),
            ]
        )
        hard = hard_matrix(self.hard, self.scaled.bases)
        normal = np.concatenate([np.zeros(self.order + 1), self.bounds.measure @ denominator])
        found = largest_margin(soft, hard, normal)
        if found is None:
            return None
        unknowns, margin, multipliers = found
        largest = _largest_coefficients(self.bounds, ratio, level, self.order)
        proven = margin > 0.0 and proves_infeasible(
            np.vstack([soft, hard]), normal, multipliers, largest
        )
        deciding = int(j[np.argmax(multipliers[i.size : i.size + j.size])])
        parts = (unknowns[: self.order + 1], unknowns[self.order + 1 :])
        return _Solution(parts, margin, proven, deciding)

    def _relative_values(self, solution: _Solution) -> tuple[FloatArray, FloatArray]:
        numerator, denominator = self.scaled.values
        return numerator @ solution.coefficients[0], denominator @ solution.coefficients[1]

    def _accept(self, solution: _Solution) -> bool:
        """Keep the pair if it is positive and better; it then weights the next program."""
        n, d = self._relative_values(solution)
        if n.min() <= SOLVER_NOISE or d.min() <= SOLVER_NOISE:
            return False
        numerator, denominator = self.scaled.numerator * n, self.scaled.denominator * d
        factor, level = self.bounds.normalised(numerator / denominator)
        if not level < (self.best.level if self.best else np.inf):
            return False
        coefficients = (factor * solution.coefficients[0], solution.coefficients[1])
        self.best = Ratio(factor * numerator, denominator, level, self.scaled.bases, coefficients)
        common = cancelling_factor(self.bounds.x, self.scaled.bases, coefficients)
        self.scaled = _scale(
            self.bounds, self.order, factor * numerator / common, denominator / common
        )
        return True

    def _add_violated(self, solution: _Solution, level: float) -> bool:
        n, d = self._relative_values(solution)
        ratio = self.scaled.numerator / self.scaled.denominator
        low, high = _row_factors(ratio, self.bounds.lower, self.bounds.limit(level))
        before = self.lower_rows.size + self.upper_rows.size
        limit = min(0.5 * solution.margin, 0.0) if solution.margin < 0.0 else solution.margin
        self.lower_rows = np.union1d(self.lower_rows, _peaks(d * low[0] - n * low[1], limit))
        self.upper_rows = np.union1d(self.upper_rows, _peaks(n * high[1] - d * high[0], limit))
        return self.lower_rows.size + self.upper_rows.size > before


def _level_without_ceiling(bounds: RatioBounds, ratio: FloatArray) -> float:
    return float((bounds.lower / ratio).max() * (ratio / bounds.upper).max())


def _first_rows(bounds: RatioBounds, order: int) -> IntArray:
    """Points spread evenly under the measure and among those that only constrain, and the ends."""
    count = 6 * order + 8
    share = np.cumsum(bounds.measure)
    spread = np.searchsorted(share, np.linspace(0.0, share[-1], count))
    constraining = np.flatnonzero(bounds.measure == 0.0)
    few = constraining[:: max(1, constraining.size // count)]
    return np.union1d(np.minimum(spread, share.size - 1), np.append(few, [0, share.size - 1]))


def _scale(
    bounds: RatioBounds, order: int, numerator: FloatArray, denominator: FloatArray
) -> _Scaled:
    bases, values = zip(
        *(
            arnoldi_basis(bounds.x, 1.0 / p, bounds.measure, order)
            for p in (numerator, denominator)
        ),
        strict=True,
    )
    return _Scaled((bases[0], bases[1]), (values[0], values[1]), numerator, denominator)


def cancelling_factor(
    x: FloatArray, bases: tuple[ArnoldiBasis, ArnoldiBasis], parts: tuple[FloatArray, FloatArray]
) -> FloatArray:
    """Return the narrow dips that N and D have in common, as a factor of order 1 elsewhere.

    A pair with nearly common roots close to the axis leaves the ratio as it is but spoils N and D
    as weights: the next pair would look large in the dip and small everywhere else.
    """
    common = np.ones(x.size)
    zeros, poles = (basis.roots(part) for basis, part in zip(bases, parts, strict=True))
    resolved = _end_resolution(x)
    for pole in poles[poles.imag >= 0.0]:
        at_end = abs(abs(pole.real) - 1.0) < 2.0 * resolved and abs(pole.imag) < 2.0 * resolved
        distance = max(abs(pole.imag), abs(pole.real) - 1.0, resolved if at_end else 1e-14)
        if not zeros.size or np.abs(zeros - pole).min() > NEARLY_COMMON * distance:
            continue
        width = 1.0 if at_end else max(0.5 * abs(1.0 - pole.real**2), distance)
        dip = ((x - pole.real) ** 2 + distance**2) / ((x - pole.real) ** 2 + width**2)
        common = common * (dip if pole.imag > 0.0 else np.sqrt(dip))
    return common


def _end_resolution(x: FloatArray) -> float:
    """Return the smallest distance from -1 or 1 at which the points can tell two roots apart."""
    inside = 1.0 - np.abs(x[np.abs(x) < 1.0])
    return float(inside.min()) if inside.size else 1e-14


def _row_factors(
    ratio: FloatArray, lower: FloatArray, limit: FloatArray
) -> tuple[tuple[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]:
    """Factors of d and n in the rows lower d - ratio n and ratio n - limit d, scaled to order 1."""
    low = (lower / (lower + ratio), ratio / (lower + ratio))
    share = ratio / limit
    high = (1.0 / (1.0 + share), share / (1.0 + share))
    return low, high


def _largest_coefficients(
    bounds: RatioBounds, ratio: FloatArray, level: float, order: int
) -> FloatArray:
    """Bound the coefficients of any pair that keeps the bounds and has mean denominator 1.

    Between the bounds d >= 0, and its mean under the measure is 1, so none of its values exceeds
    1 / min(measure) and the coefficients in the orthonormal basis have a 2-norm of at most that to
    the power 1/2. n <= limit / ratio * d bounds the numerator likewise.
    """
    data = bounds.measure > 0.0
    denominator = float(bounds.measure[data].min()) ** -0.5
    numerator = denominator * float((bounds.limit(level) / ratio)[data].max())
    return np.repeat([numerator, denominator], order + 1)


def _peaks(values: FloatArray, limit: float) -> IntArray:
    """Return the indices of local maxima above the limit."""
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    high = (values > limit) & (values >= padded[:-2]) & (values >= padded[2:])
    return np.flatnonzero(high)
