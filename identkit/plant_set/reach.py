"""Reach of fitted plants and of measured responses, from the set file alone.

The reach of a plant is the smallest scaling of the set that holds it: the supremum over the band of
the least norm of Delta (`pointwise`), infinite where the plant has another number of unstable poles
than the nominal (J. C. Doyle and G. Stein, IEEE Trans. Automat. Contr. 26(1), 1981) or, in the
inverse form, turns around zero beside it. Nothing here
is shared with the code that builds sets: the supremum is searched on adaptive grids (`peaks`), not
by level tests.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import (
    BoolArray,
    ComplexArray,
    FittedPlant,
    FloatArray,
    IntArray,
    Matrices,
    PlantSetFields,
)
from identkit.plant_set.peaks import Evaluate, clustered, even_grid, highest
from identkit.plant_set.pointwise import pointwise_reach
from identkit.plant_set.response import delay_factor, evaluation_points
from identkit.plant_set.schur import SchurResponse, plant_matrices, plant_poles, zeros
from identkit.plant_set.stacked import StackedPlants, stack

PLANTS_AT_ONCE = 24
LOWEST_SHARE = 1e-9
REST_SHARE = 1e-3
_ON_AXIS = 1e-6
_FAST = 1e-9


@dataclass(frozen=True, eq=False)
class Reach:
    """Reach of several plants.

    Attributes
    ----------
    value
        (plants,) smallest scaling of the set that holds each plant.
    frequency
        (plants,) Hz, where it is attained.
    """

    value: FloatArray
    frequency: FloatArray


def reach_of_plants(contents: PlantSetFields, plants: Sequence[FittedPlant]) -> Reach:
    """Return the reach of fitted plants over the band of the set.

    Parameters
    ----------
    contents
        The set.
    plants
        Plants of the same number of inputs and outputs.

    Raises
    ------
    InputError
        If the form has no pointwise reach.
    """
    around = Surroundings(contents)
    unstable = count_unstable(around.nominal_poles, around.rest)
    pieces = []
    for start in range(0, len(plants), PLANTS_AT_ONCE):
        some = plants[start : start + PLANTS_AT_ONCE]
        value, frequency = _reach_of_some(around, some)
        alike = np.array(
            [count_unstable(plant_poles(plant), around.rest) == unstable for plant in some]
        )
        if contents.form == "inverse-multiplicative" and contents.is_scalar:
            alike &= ~_turning(around, some)
        pieces.append((np.where(alike, value, np.inf), frequency))
    if not pieces:
        return Reach(np.zeros(0), np.zeros(0))
    return Reach(*(np.concatenate(part) for part in zip(*pieces, strict=True)))


def count_unstable(poles: ComplexArray, rest: float = 0.0) -> int:
    """Count the poles right of the imaginary axis; those on it do not count.

    Parameters
    ----------
    poles
        (poles,) rad/s.
    rest
        rad/s; slower poles are taken for those of a free base, which rounding splits in two.
    """
    right = poles.real > _ON_AXIS * np.abs(poles) + _ON_AXIS
    return int(np.sum(right & (np.abs(poles) > rest)))


class Surroundings:
    """Nominal and weights of a set, ready to be evaluated at many frequencies."""

    def __init__(self, contents: PlantSetFields) -> None:
        self.form = contents.form
        # At rest a free base is infinite and only its limit counts.
        low, high = contents.band
        self.band = (max(low, LOWEST_SHARE * high), high)
        self.period = contents.time.period
        if self.period > 0.0 and high > (0.5 + 1e-9) / self.period:
            expected = f"at most half the rate, {0.5 / self.period:g} Hz"
            raise InputError(Problem("band", f"{high:g} Hz", expected))
        self._delay = contents.nominal.delay
        self._nominal = SchurResponse(contents.nominal)
        outputs, inputs = contents.nominal.D.shape
        sizes = {
            "additive": (outputs, inputs),
            "input-multiplicative": (inputs, inputs),
        }.get(contents.form, (outputs, outputs))
        self._left = SchurResponse(contents.weights.left or _identity(sizes[0]))
        self._right = SchurResponse(contents.weights.right or _identity(sizes[1]))
        self.common_grid = np.unique(
            np.concatenate([even_grid(self.band), clustered(self._features(contents), self.band)])
        )
        self._common = self.at(self.common_grid)

    def _features(self, contents: PlantSetFields) -> ComplexArray:
        """Return poles and zeros of nominal and weights near the band, one of each pair."""
        far = 2.0 * np.pi * self.band[1]
        parts = (contents.nominal, contents.weights.left, contents.weights.right)
        found = [zeros(part, far) for part in parts if part is not None]
        found += [part.poles for part in (self._nominal, self._left, self._right)]
        return _upper_half(np.concatenate([as_continuous(item, self.period) for item in found]))

    @property
    def nominal_poles(self) -> ComplexArray:
        """(states,) poles of the nominal, rad/s; those of z by s = ln(z)/period."""
        return as_continuous(self._nominal.poles, self.period)

    @property
    def rest(self) -> float:
        """Far below the band (rad/s): poles here are on the axis as far as the band can tell."""
        return REST_SHARE * 2.0 * np.pi * self.band[0]

    def at(self, frequency: FloatArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
        """Return nominal, left and right weight, each (points, rows, columns)."""
        points = evaluation_points(frequency, self.period)
        nominal = self._nominal(points) * delay_factor(frequency, self._delay)[:, None, None]
        return nominal, self._left(points), self._right(points)

    def reach_at(self, frequency: FloatArray, plant: ComplexArray) -> FloatArray:
        """Return the pointwise reach of (points, outputs, inputs) responses at (points,) Hz."""
        return pointwise_reach(self.form, plant, *self.at(frequency))

    def reach_on_common_grid(self, plants: ComplexArray) -> FloatArray:
        """Return (plants, points) reach of (plants, points, outputs, inputs) responses."""
        return pointwise_reach(self.form, plants, *self._common)


def as_continuous(roots: ComplexArray, period: float) -> ComplexArray:
    """Return roots in z as s = ln(z)/period, rad/s, roots at 0 (delays) left out; s as they are."""
    if period <= 0.0:
        return roots
    slow = roots[np.abs(roots) > _FAST].astype(complex)
    found = np.log(slow) / period
    # A root on the negative axis stands at half the rate, on whichever side rounding puts it.
    return np.asarray(found.real + 1j * np.abs(found.imag))


def folded(poles: ComplexArray, period: float) -> ComplexArray:
    """Return continuous poles as the samples see them, modulo the rate."""
    return poles if period <= 0.0 else as_continuous(np.exp(poles * period), period)


def _identity(size: int) -> Matrices:
    none = np.zeros((0, 0))
    return Matrices(none, np.zeros((0, size)), np.zeros((size, 0)), np.eye(size))


def _upper_half(features: ComplexArray) -> ComplexArray:
    return features[features.imag >= 0.0]


def _reach_of_some(
    around: Surroundings, plants: Sequence[FittedPlant]
) -> tuple[FloatArray, FloatArray]:
    stacked = stack(plants)
    rows = np.arange(len(plants))
    own = clustered(_own_features(plants, around.band, around.period), around.band)
    common = np.broadcast_to(around.common_grid, (rows.size, around.common_grid.size))
    on_common = around.reach_on_common_grid(stacked.response(rows, common, around.period))
    there = stacked.response(rows, own, around.period).reshape(-1, *stacked.shape)
    on_own = around.reach_at(own.ravel(), there)
    grid = np.concatenate([common, own], axis=1)
    values = np.concatenate([on_common, on_own.reshape(own.shape)], axis=1)
    order = np.argsort(grid, axis=1, kind="stable")
    grid, values = (np.take_along_axis(part, order, axis=1) for part in (grid, values))
    return highest(grid, values, _evaluator(around, stacked))


def _turning(around: Surroundings, plants: Sequence[FittedPlant]) -> BoolArray:
    """Tell which scalar plants turn around zero beside the nominal: no members of an inverse form.

    1 + W Delta = P0/P must not encircle zero, or |W S| < 1 would prove nothing; it cannot where
    |W Delta| < 1. Phases are followed over grids clustered at every pole and zero.
    """
    stacked = stack(plants)
    own = clustered(_own_features(plants, around.band, around.period), around.band)
    found = np.zeros(len(plants), dtype=bool)
    for row in range(len(plants)):
        grid = np.unique(np.concatenate([around.common_grid, own[row]]))
        plant = stacked.response(np.array([row]), grid[None], around.period)[0, :, 0, 0]
        phase = np.angle(around.at(grid)[0][:, 0, 0] / plant)
        jumps = np.diff(phase)
        found[row] = np.sum(jumps < -np.pi) != np.sum(jumps > np.pi)
    return found


def _evaluator(around: Surroundings, stacked: StackedPlants) -> Evaluate:
    def evaluate(row: IntArray, frequency: FloatArray) -> FloatArray:
        there = stacked.response(row, frequency[:, None], around.period)
        return around.reach_at(frequency, there[:, 0])

    return evaluate


def _own_features(
    plants: Sequence[FittedPlant], band: tuple[float, float], period: float
) -> ComplexArray:
    """Return (plants, features) poles and zeros, padded with the lower end of the band."""
    found = []
    for plant in plants:
        poles = folded(plant_poles(plant), period)
        if plant.feedthrough.size == 1 and period <= 0.0:
            poles = np.concatenate([poles, zeros(plant_matrices(plant), 2.0 * np.pi * band[1])])
        found.append(_upper_half(poles))
    most = max(item.size for item in found)
    padded = np.full((len(found), most), 2.0j * np.pi * band[0] - 1e-6)
    for row, item in enumerate(found):
        padded[row, : item.size] = item
    return padded


def reach_of_response(
    contents: PlantSetFields, frequency: FloatArray, measured: ComplexArray
) -> Reach:
    """Return the reach of one measured response at its own points inside the band.

    Parameters
    ----------
    contents
        The set.
    frequency
        (points,) Hz.
    measured
        (outputs, inputs, points), or (points,) for a scalar plant; NaN points do not count.

    Returns
    -------
    Reach
        One value; NaN where no point counts.
    """
    plant = np.asarray(measured, dtype=complex)
    plant = plant[None, None] if plant.ndim == 1 else plant
    low, high = contents.band
    usable = (frequency >= low) & (frequency <= high) & np.isfinite(plant).all(axis=(0, 1))
    if not usable.any():
        return Reach(np.array([np.nan]), np.array([np.nan]))
    some = np.asarray(frequency, dtype=float)[usable]
    values = Surroundings(contents).reach_at(some, np.moveaxis(plant[:, :, usable], -1, 0))
    best = int(values.argmax())
    return Reach(values[[best]], some[[best]])
