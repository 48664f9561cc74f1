"""Tightest rational weight over a radius curve, globally optimal for its order.

|W|^2 = N/D with N, D polynomials of degree n in x = cos(theta) of a bilinear warp of frequency;
for a given excess the conditions radius^2 <= N/D <= excess^2 (radius profile)^2 are linear in the
coefficients, so the best excess is found, and proved, by linear programs
(`differential_correction`), and W follows by spectral factorisation (`spectral_factor`).

Source of the formulation: S.-P. Wu, S. Boyd, L. Vandenberghe, "FIR filter design via spectral
factorization and convex optimization", in *Applied and Computational Control, Signals and
Circuits*, 1999 (magnitude bounds on rational squared magnitudes are quasi-convex).
"""

from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.damping_rows import offending, rows_around
from identkit.methods.differential_correction import (
    Ratio,
    Search,
    constant_ratio,
    lower_ratio,
)
from identkit.methods.margin_program import HardRows
from identkit.methods.radius_problem import RadiusProblem, radius_problem
from identkit.methods.series_sections import StateMatrices, series_state_space
from identkit.methods.spectral_factor import (
    WarpedPolynomial,
    damping_ratios,
    factor_magnitude,
    left_half_plane,
    squared_roots,
)

DAMPING_FLOOR = 0.002
TOLERANCE_DB = 0.02
LADDER = (1, 2, 3, 4, 6, 8, 10, 12, 16, 20, 24)
LADDER_TOLERANCE_DB = 0.2
DAMPING_PROGRAMS = 120
ROUND_PROGRAMS = 50
RESTART_PROGRAMS = 30
RESTARTS = ((0.01, 1.0), (0.03, 1.0), (0.01, 4.0), (0.03, 16.0), (0.03, 64.0))
FAR = 1e6
TWO_PI = 2.0 * np.pi


@dataclass(frozen=True)
class MagnitudeWeight:
    """A stable minimum-phase weight with the proof of how good it is.

    Attributes
    ----------
    order
        Order asked for.
    excess_db
        Largest 20 log10 |W| / (radius profile) over the points, recomputed from poles and zeros.
    floor_db
        No weight of this order under the same conditions, whatever its damping, has a smaller
        excess: proven lower bound.
    gap_db
        excess_db - floor_db.
    damping_cost_db
        What the damping floor added to the excess.
    poles, zeros
        rad/s, left half plane; as many zeros as poles, at most `order`.
    gain
        |W| at infinite frequency.
    programs
        Number of linear programs solved.
    """

    order: int
    excess_db: float
    floor_db: float
    gap_db: float
    damping_cost_db: float
    poles: ComplexArray
    zeros: ComplexArray
    gain: float
    programs: int

    def magnitude(self, frequency_hz: FloatArray) -> FloatArray:
        """Return |W| at frequencies in Hz."""
        omega = TWO_PI * np.asarray(frequency_hz, dtype=float)
        return factor_magnitude(omega, self.poles, self.zeros, self.gain)

    def state_space(self) -> StateMatrices:
        """Return real matrices A, B, C, D of W, first- and second-order sections in series."""
        return series_state_space(self.poles, self.zeros, self.gain)

    @property
    def least_damping(self) -> float:
        """Smallest damping ratio of all poles and zeros; 1 at order 0."""
        roots = np.concatenate([self.poles, self.zeros])
        return float(damping_ratios(roots).min()) if roots.size else 1.0


def fit_magnitude_weight(
    frequency_hz: FloatArray,
    radius: FloatArray,
    order: int,
    *,
    profile: FloatArray | None = None,
    cap: FloatArray | None = None,
    damping_floor: float = DAMPING_FLOOR,
    tolerance_db: float = TOLERANCE_DB,
    outside_factor: float = 10.0,
    ceiling: tuple[FloatArray, FloatArray] | None = None,
    start: MagnitudeWeight | None = None,
) -> MagnitudeWeight:
    """Fit the tightest weight of an order: |W| >= radius at every point, least worst excess.

    Parameters
    ----------
    frequency_hz
        (points,) Hz, not negative, in any order; at least 2 order + 1 different ones.
    radius
        (points,) positive.
    order
        Number of poles and of zeros.
    profile
        (points,) allowed shape of the excess: |W| / (radius profile) is what is minimised.
    cap
        (points,) absolute ceiling on |W|; inf for none. Held at its end values outside the points.
    damping_floor
        Least damping ratio of every pole and zero. The default lies below the damping of the
        structural resonances that make peaks in a radius (0.5 to 2 %, common practice), so peaks
        can be followed; a higher floor is paid for in dB wherever the radius is sharper, and
        `damping_cost_db` says how much.
    tolerance_db
        Gap to the proven optimum at which the search may end, damping cost apart.
    outside_factor
        Below and above the points, and in gaps wider than a tenth, |W| stays within this factor of
        what is asked and allowed at the neighbours (the excess counts there too), so that no weight
        gains by a dip or a peak where nothing is asked. Below and above, the lower limit is relaxed
        by its cube: a weight may go on falling there. inf turns all this off.
    ceiling
        (frequencies in Hz, values) further absolute ceilings on |W|, where no radius is given.
    start
        A weight for a similar problem (a coarser grid, say) to start from.

    Returns
    -------
    MagnitudeWeight
        The weight, its excess, the proven floor and the gap.

    Raises
    ------
    InputError
        If arrays disagree in length, hold values out of range, or are too short for the order.
    InfeasibleError
        If no weight of this order stays below the ceilings; names the frequency that decides.

    Notes
    -----
    Holds at the points only: between them the caller has to look, add points and fit again. At
    orders far above what the radius needs (an excess of some tenths of a dB) the floor may stay
    unproven; `gap_db` then says so by its size. Scalar weights only.
    """
    problem = radius_problem(
        frequency_hz,
        radius,
        order,
        profile=profile,
        cap=cap,
        ceiling=ceiling,
        outside_factor=outside_factor,
    )
    climb = WeightClimb(problem, damping_floor, tolerance_db)
    if start is None:
        for step in (n for n in LADDER if n < order):
            climb.search(step, LADDER_TOLERANCE_DB)
    elif start.order:
        climb.start_from(start)
    return climb.weight(order)


@dataclass(frozen=True)
class _Roots:
    """Poles and zeros with the gain that keeps the radius; excess inf where a ceiling is broken."""

    poles: ComplexArray
    zeros: ComplexArray
    gain: float
    excess_db: float


class WeightClimb:
    """Orders in ascending sequence, each search started from the one before.

    Parameters
    ----------
    problem
        What the weight keeps.
    damping_floor, tolerance_db
        As in `fit_magnitude_weight`.
    """

    def __init__(self, problem: RadiusProblem, damping_floor: float, tolerance_db: float) -> None:
        self.problem, self.damping_floor = problem, damping_floor
        self.tolerance_db = tolerance_db
        constant = constant_ratio(problem.bounds)
        self.start = (constant.numerator, constant.denominator)
        self.best = constant if np.isfinite(constant.level) else None
        self.programs = 0

    def start_from(self, weight: MagnitudeWeight) -> None:
        """Take the squared magnitudes of another weight's zeros and poles as first weights."""
        self.start = self.problem.squared_parts(weight.poles, weight.zeros)

    def search(self, order: int, tolerance_db: float) -> Search:
        """Lower the excess at this order; later orders start from what is found."""
        if order == 0:
            return self._constant()
        if self.best is None:
            found = self._below_ceiling(order)
            if self.best is None:
                return found
        bounds, tolerance = self.problem.bounds, _relative(tolerance_db)
        found = lower_ratio(bounds, order, self.start, tolerance=tolerance, initial=self.best)
        self._keep(found)
        return found

    def weight(self, order: int) -> MagnitudeWeight:
        """Search at full tolerance, keep the damping floor, factorise.

        Raises
        ------
        InfeasibleError
            If no weight of this order stays below the ceilings.
        """
        self.programs = 0
        found = self._settled(order, self.search(order, 0.5 * self.tolerance_db))
        if found.best is None:
            raise self.problem.infeasible(order, found.deciding, proven=found.floor > 1.0)
        kept = self._damped(order, found.best)
        if not np.isfinite(kept.excess_db):
            raise self.problem.infeasible(order, found.deciding, proven=False)
        floor_db = _decibels(found.floor)
        return MagnitudeWeight(
            order=order,
            excess_db=kept.excess_db,
            floor_db=floor_db,
            gap_db=kept.excess_db - floor_db,
            damping_cost_db=max(kept.excess_db - _decibels(found.best.level), 0.0),
            poles=kept.poles,
            zeros=kept.zeros,
            gain=kept.gain,
            programs=self.programs,
        )

    def _settled(self, order: int, found: Search) -> Search:
        """Search again with well-damped weights where the floor is not proven, then less tightly.

        A pair with roots on the axis is a poor weight for the next one.
        """
        for damping, relaxed in RESTARTS:
            if found.settled or found.best is None:
                break
            zeros, poles = _factors(found.best, self.problem)
            again = lower_ratio(
                self.problem.bounds,
                order,
                self.problem.squared_parts(_moved(poles, damping), _moved(zeros, damping)),
                tolerance=_relative(0.5 * relaxed * self.tolerance_db),
                initial=found.best,
                most_programs=RESTART_PROGRAMS,
            )
            self._keep(again)
            found = replace(again, floor=max(again.floor, found.floor))
        return found

    def _keep(self, found: Search) -> None:
        self.programs += found.programs
        if found.best is not None:
            self.best = found.best
            self.start = (found.best.numerator, found.best.denominator)

    def _constant(self) -> Search:
        constant = constant_ratio(self.problem.bounds)
        if np.isfinite(constant.level):
            return Search(constant, constant.level, True, -1, 0)
        return Search(None, np.inf, False, int(np.argmin(self.problem.bounds.ceiling)), 0)

    def _below_ceiling(self, order: int) -> Search:
        """Look for any pair below the ceilings; it starts the search."""
        bounds = self.problem.ceiling_bounds()
        found = lower_ratio(bounds, order, self.start, tolerance=1e-4, stop_level=1.0)
        self.programs += found.programs
        if found.best is None:
            return found
        pair = found.best
        self.start = (pair.numerator, pair.denominator)
        level = self.problem.bounds.normalised(pair.numerator / pair.denominator)[1]
        self.best = replace(pair, level=level) if np.isfinite(level) else None
        return replace(found, best=self.best)

    def _damped(self, order: int, free: Ratio) -> _Roots:
        """Return poles and zeros that keep the damping floor, near the best excess.

        Rows are added around offending roots and the search repeated; in every round the roots that
        still offend are turned onto the floor, and the best outcome of all rounds is returned.
        """
        hard, pair, damping, best = HardRows(), free, 1.02 * self.damping_floor, None
        enough = _decibels(free.level) + 0.2 * self.tolerance_db
        budget = self.programs + DAMPING_PROGRAMS
        while True:
            zeros, poles = _factors(pair, self.problem)
            best = self._better(best, poles, zeros)
            clean = not self._offending(poles, zeros)
            if clean or best.excess_db <= enough or self.programs >= budget:
                return best
            hard = hard.joined(self._rows(poles, zeros, damping))
            found = lower_ratio(
                self.problem.bounds,
                order,
                self.problem.squared_parts(_moved(poles, damping), _moved(zeros, damping)),
                tolerance=_relative(0.25 * self.tolerance_db),
                hard=hard,
                most_programs=ROUND_PROGRAMS,
            )
            self.programs += max(found.programs, 1)
            if found.best is None:
                return best
            pair, damping = found.best, damping * 1.05

    def _offending(self, poles: ComplexArray, zeros: ComplexArray) -> bool:
        return any(offending(roots, self.damping_floor).size for roots in (poles, zeros))

    def _rows(self, poles: ComplexArray, zeros: ComplexArray, damping: float) -> HardRows:
        centre, floor = self.problem.centre, self.damping_floor
        above = rows_around(offending(zeros, floor), damping, centre, on_numerator=True)
        return above.joined(
            rows_around(offending(poles, floor), damping, centre, on_numerator=False)
        )

    def _better(self, best: _Roots | None, poles: ComplexArray, zeros: ComplexArray) -> _Roots:
        """Turn offending roots onto the floor; return this outcome or the best so far."""
        poles, zeros = _moved(poles, self.damping_floor), _moved(zeros, self.damping_floor)
        gain, excess_db = self.problem.settled_gain(poles, zeros)
        if not self.problem.below_ceiling(poles, zeros, gain):
            excess_db = np.inf
        if best is not None and best.excess_db <= excess_db:
            return best
        return _Roots(poles, zeros, gain, excess_db)


def _factors(pair: Ratio, problem: RadiusProblem) -> tuple[ComplexArray, ComplexArray]:
    """Zeros and poles of a pair, equal in number."""
    finite = np.isfinite(problem.omega)
    u = (problem.omega[finite] / problem.centre) ** 2
    parts = (pair.numerator, pair.denominator)
    roots = [
        squared_roots(WarpedPolynomial(basis, coefficients, u, values[finite]))
        for basis, coefficients, values in zip(pair.bases, pair.coefficients, parts, strict=True)
    ]
    count = max(part.size for part in roots)
    far = FAR**2 * float(u.max())
    full = [np.append(part, np.full(count - part.size, -far)) for part in roots]
    return left_half_plane(full[0], problem.centre), left_half_plane(full[1], problem.centre)


def _moved(roots: ComplexArray, floor: float) -> ComplexArray:
    """Turn offending roots at constant size onto the damping floor."""
    moved = roots.copy()
    low = damping_ratios(roots) < floor
    side = np.where(roots.imag[low] < 0.0, -1.0, 1.0)
    moved[low] = np.abs(roots[low]) * (-floor + 1j * side * np.sqrt(1.0 - floor**2))
    return moved


def _relative(tolerance_db: float) -> float:
    return float(10.0 ** (tolerance_db / 10.0) - 1.0)


def _decibels(level: float) -> float:
    return float(10.0 * np.log10(level))
