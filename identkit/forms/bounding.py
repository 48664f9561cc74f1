"""The tightest weight of an order that holds every plant everywhere in a band.

Bound on points, look between them with the exact level test, add the points that were missed,
bound again. A remainder too small to matter is taken up by the gain, so the result always holds;
what that costs is part of the stated excess.
"""

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import reduce
from typing import TypeVar

import numpy as np

from identkit.errors import InfeasibleError, InputError, Problem
from identkit.forms.between_points import LEVEL_TOLERANCE, Peak, largest_ratio, peaks_above
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.radius_curve import RadiusCurve, interpolated
from identkit.methods.arrays import FloatArray
from identkit.methods.magnitude_weight import MagnitudeWeight, fit_magnitude_weight
from identkit.methods.modal_model import ModalParameters
from identkit.methods.weight_order import choose_order

# Remainder the gain may take up, 0.0026 dB; with the fit's own gap it stays below 0.02 dB.
NEARLY = 3e-4
FIT_TOLERANCE_DB = 0.015
MOST_ROUNDS = 8
# A trial weight may miss points by 0.1 dB; its stated excess counts what that costs.
TRIAL_LEVEL = 1.012
MOST_COMPLETIONS = 4

S = TypeVar("S")
T = TypeVar("T")


@dataclass(frozen=True)
class BoundOptions:
    """What is asked of the weight.

    Attributes
    ----------
    order
        "auto" or a number.
    profile
        Pairs (Hz, allowed excess), linear over log frequency, ends held.
    cap
        Pairs (Hz, largest |W|), likewise; empty for none.
    radius_floor
        Smallest radius bounded, as a share of the form's error of 100 %.
    jobs
        Threads; results do not depend on it.
    """

    order: str | int = "auto"
    profile: Sequence[tuple[float, float]] = ((100.0, 1.0), (1000.0, 3.0))
    cap: Sequence[tuple[float, float]] = ()
    radius_floor: float = 0.02
    jobs: int = 1


@dataclass(frozen=True)
class OrderTrial:
    """One row of the trade-off: excess achieved over the whole grid and the proved floor, dB."""

    order: int
    excess_db: float
    floor_db: float


@dataclass(frozen=True)
class SpreadBound:
    """A weight that holds every plant, and how well.

    Attributes
    ----------
    curve
        Points, required radius and who sets it.
    weight
        The weight; its excess and gap count every point of `curve`.
    trials
        The trade-off of order; one row where the order was given.
    rule
        Why this order.
    peaks
        Reach and its frequency for every plant.
    tolerance
        No plant exceeds its reach by more than this, relative, anywhere in the band.
    rounds
        Number of weights fitted after the first.
    """

    curve: RadiusCurve
    weight: MagnitudeWeight
    trials: tuple[OrderTrial, ...]
    rule: str
    peaks: tuple[Peak, ...]
    tolerance: float
    rounds: int


def bound_plants(
    plants: Sequence[ModalParameters],
    common: CommonPart,
    frequency: FloatArray,
    options: BoundOptions,
    names: Sequence[str] = (),
) -> SpreadBound:
    """Return the tightest weight over the band of `common`, certified between the points.

    Parameters
    ----------
    plants
        Plants to hold.
    common
        Nominal, band and form.
    frequency
        (points,) Hz to begin with, inside the band.
    options
        Order, profile, cap, floor.
    names
        What to call the plants in messages; their numbers from 1 where empty.

    Raises
    ------
    InfeasibleError
        If no weight of the order stays below the cap; names the frequency.
    InputError
        If a plant's delay is too long for a rational stand-in over the band.
    """
    return _Bounding(plants, common, frequency, options, names).run()


class _Bounding:
    """The work of `bound_plants`, step by step."""

    def __init__(
        self,
        plants: Sequence[ModalParameters],
        common: CommonPart,
        frequency: FloatArray,
        options: BoundOptions,
        names: Sequence[str],
    ) -> None:
        self.names = names or [f"plant {k + 1}" for k in range(len(plants))]
        self.plants, self.common, self.options = plants, common, options
        self.order_given = None if options.order == "auto" else int(options.order)
        self.comparisons = self.each(self._comparison, range(len(plants)))
        self.curve = self._curve_at(frequency)
        self.fitted = frequency[self.curve.decisive()]

    def run(self) -> SpreadBound:
        weight, trials, rule = self._first_weight()
        rounds = 0
        while self._look_between(weight) > 1.0 + NEARLY and rounds < MOST_ROUNDS:
            weight = self._refitted(weight)
            rounds += 1
        starts = self._best_points(weight)
        peaks = self.each(
            lambda k: largest_ratio(self.comparisons[k], weight, starts[k]), range(len(self.plants))
        )
        factor = max(max(peak.ratio for peak in peaks), self.curve.shortfall(weight))
        scaled = self._scaled(weight, factor)
        own = OrderTrial(scaled.order, scaled.excess_db, scaled.floor_db)
        return SpreadBound(
            curve=self.curve,
            weight=scaled,
            trials=tuple(own if trial.order == own.order else trial for trial in trials) or (own,),
            rule=rule,
            peaks=tuple(replace(peak, ratio=peak.ratio / factor) for peak in peaks),
            tolerance=self._tolerance(scaled),
            rounds=rounds,
        )

    def each(self, work: Callable[[S], T], items: Sequence[S]) -> list[T]:
        """Map in order, over threads if there are several (linear algebra runs outside locks)."""
        if self.options.jobs <= 1:
            return [work(item) for item in items]
        with ThreadPoolExecutor(self.options.jobs) as pool:
            return list(pool.map(work, items))

    def _comparison(self, k: int) -> PlantComparison:
        try:
            return PlantComparison(self.plants[k], self.common)
        except ValueError as error:
            expected = "a delay short enough over the band; lower its upper end"
            raise InputError(Problem(self.names[k], str(error), expected)) from error

    def _curve_at(self, frequency: FloatArray) -> RadiusCurve:
        def of_block(rows: range) -> RadiusCurve:
            best = RadiusCurve(frequency, np.zeros(len(frequency)), np.full(len(frequency), -1))
            for k in rows:
                error = np.abs(self.common.error(frequency, self.plants[k]))
                best = best.larger(RadiusCurve(frequency, error, np.full(len(frequency), k)))
            return best

        share = -(-len(self.plants) // max(self.options.jobs, 1))
        starts = range(0, len(self.plants), share)
        blocks = [range(k, min(k + share, len(self.plants))) for k in starts]
        curves = self.each(of_block, blocks)
        floor = self.options.radius_floor * self.common.reference(frequency)
        return reduce(RadiusCurve.larger, curves).with_floor(floor)

    def _first_weight(self) -> tuple[MagnitudeWeight, tuple[OrderTrial, ...], str]:
        if self.order_given is not None:
            return self._fit(self.order_given), (), f"order {self.order_given}: asked for"
        points, radius, profile, cap = self._fit_points()
        choice = choose_order(
            points, radius, profile=profile, cap=cap, tolerance_db=FIT_TOLERANCE_DB
        )
        weights = self._completed({weight.order: weight for weight in choice.weights})
        trials = []
        for weight in weights.values():
            full = self._scaled(weight, max(self.curve.shortfall(weight), 1.0), refuse=False)
            trials.append(OrderTrial(full.order, full.excess_db, full.floor_db))
        return weights[choice.chosen.order], tuple(trials), choice.rule

    def _completed(self, weights: dict[int, MagnitudeWeight]) -> dict[int, MagnitudeWeight]:
        """Fit those trial weights again that miss points of the curve they were not fitted to."""
        for _ in range(MOST_COMPLETIONS):
            missed = {n: self._missed(weight, TRIAL_LEVEL) for n, weight in weights.items()}
            self.fitted = np.concatenate([self.fitted, *missed.values()])
            stale = [n for n, frequency in missed.items() if frequency.size]
            if not stale:
                break
            weights = weights | {n: self._refitted(weights[n]) for n in stale}
        return weights

    def _fit(self, order: int, start: MagnitudeWeight | None = None) -> MagnitudeWeight:
        points, radius, profile, cap = self._fit_points()
        return fit_magnitude_weight(
            points,
            radius,
            order,
            profile=profile,
            cap=cap,
            tolerance_db=FIT_TOLERANCE_DB,
            start=start,
        )

    def _refitted(self, weight: MagnitudeWeight) -> MagnitudeWeight:
        """Fit again from the last weight; from scratch as well if that is not proved the best."""
        try:
            warm = self._fit(weight.order, start=weight)
        except InfeasibleError:
            return self._fit(weight.order)
        if warm.gap_db - warm.damping_cost_db <= 2.0 * FIT_TOLERANCE_DB:
            return warm
        return min(warm, self._fit(weight.order), key=lambda each: each.excess_db)

    def _fit_points(self) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray | None]:
        chosen = np.isin(self.curve.frequency, self.fitted)
        points, radius = self.curve.frequency[chosen], self.curve.required[chosen]
        profile = interpolated(self.options.profile, points)
        if not self.options.cap:
            return points, radius, profile, None
        # Headroom below the cap: the last step may raise the gain by as much.
        return points, radius * (1.0 + NEARLY), profile, interpolated(self.options.cap, points)

    def _look_between(self, weight: MagnitudeWeight) -> float:
        """Add what the weight missed to the curve and to the fit.

        Returns the worst of the ratios of the plants to the weight, and of its excess over the
        whole curve to the excess it was fitted for.
        """
        missed = self._missed(weight, 1.0 + LEVEL_TOLERANCE)
        over = self.curve.excess_db(weight, self._profile()) - weight.excess_db
        found = self.each(
            lambda comparison: peaks_above(comparison, weight, 1.0 + LEVEL_TOLERANCE),
            self.comparisons,
        )
        peaks = [peak for several in found for peak in several]
        ratios = [peak.ratio for peak in peaks]
        worst = max([self.curve.shortfall(weight), float(10.0 ** (over / 20.0)), *ratios])
        added = np.unique([peak.frequency for peak in peaks])
        self.fitted = np.concatenate([self.fitted, missed, added])
        if added.size:
            self.curve = self.curve.joined(self._curve_at(added))
        return worst

    def _missed(self, weight: MagnitudeWeight, level: float) -> FloatArray:
        return self.curve.frequency[self.curve.missed(weight, self._profile(), level)]

    def _profile(self) -> FloatArray:
        return interpolated(self.options.profile, self.curve.frequency)

    def _best_points(self, weight: MagnitudeWeight) -> FloatArray:
        """Return the best grid point of every plant, Hz."""
        frequency, magnitude = self.curve.frequency, weight.magnitude(self.curve.frequency)

        def best(k: int) -> float:
            error = self.common.error(frequency, self.plants[k])
            return float(frequency[np.argmax(np.abs(error) / magnitude)])

        return np.array(self.each(best, range(len(self.plants))))

    def _scaled(
        self, weight: MagnitudeWeight, factor: float, refuse: bool = True
    ) -> MagnitudeWeight:
        scaled = replace(weight, gain=weight.gain * factor)
        frequency = self.curve.frequency
        if self.options.cap and refuse:
            over = scaled.magnitude(frequency) / interpolated(self.options.cap, frequency)
            worst = int(np.argmax(over))
            if over[worst] > 1.0 + 1e-9:
                raise InfeasibleError(
                    f"no weight of order {weight.order} found that holds every plant and stays "
                    f"below [bound] cap: at {frequency[worst]:.6g} Hz it is {over[worst]:.4g} "
                    "times the cap",
                    float(frequency[worst]),
                )
        excess = self.curve.excess_db(scaled, self._profile())
        return replace(scaled, excess_db=excess, gap_db=excess - weight.floor_db)

    def _tolerance(self, weight: MagnitudeWeight) -> float:
        """Level tolerance plus what the stand-ins for the delays can hide."""
        reference = self.common.reference(self.curve.frequency)
        smallest = float(np.min(weight.magnitude(self.curve.frequency) / reference))
        delay = max(comparison.delay_error for comparison in self.comparisons)
        return LEVEL_TOLERANCE + delay * (1.0 / smallest + 1.0)
