"""What a set costs: the bandwidth it allows, and the peak and mean of its radius.

The yardstick is one standard second-order loop for every form (`methods.allowed_bandwidth`), so
that forms, nominals, orders and sets can be compared by one number.
"""

from dataclasses import dataclass

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.allowed_bandwidth import AllowedBandwidth, Unremovable, allowed_bandwidth
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.plant_set.fields import PlantSetFields
from identkit.plant_set.peaks import clustered, even_grid
from identkit.plant_set.reach import Surroundings, count_unstable
from identkit.plant_set.response import TWO_PI
from identkit.plant_set.schur import zeros

CONDITIONS = {
    "multiplicative": "complementary",
    "input-multiplicative": "complementary",
    "additive": "complementary",
    "inverse-multiplicative": "sensitivity",
}
BELOW, ABOVE = 1e-2, 1e2
FARTHEST_ZERO = 1e3


@dataclass(frozen=True)
class SetPrice:
    """The price of a set.

    Attributes
    ----------
    bandwidth
        Highest crossover of the standard loop that the set allows.
    order
        Order of the weights, together.
    peak_db, mean_db
        Largest weight in the band, and its mean over log frequency, 20 log10.
    """

    bandwidth: AllowedBandwidth
    order: int
    peak_db: float
    mean_db: float


def price_of_set(contents: PlantSetFields) -> SetPrice:
    """Return the price of a scalar set in continuous time.

    Raises
    ------
    InputError
        If the set is none of those the yardstick covers.
    """
    low, high = contents.band
    grid = even_grid((max(low, 1e-4 * high), high))
    weight = _Size(contents).weight(grid)
    sides = (contents.weights.left, contents.weights.right)
    order = sum(side.states for side in sides if side is not None)
    levels = 20.0 * np.log10(weight)
    return SetPrice(bandwidth_of_set(contents), order, float(levels.max()), float(levels.mean()))


def bandwidth_of_set(contents: PlantSetFields) -> AllowedBandwidth:
    """Return the highest crossover of the standard loop that stays robustly stable on the set.

    The weight counts at all frequencies, beyond the band by its extension.

    Raises
    ------
    InputError
        For matrix plants, sampled sets, sets with real factors and unstable nominals.
    """
    size = _Size(contents)
    carried = unremovable(size.around, contents)
    return allowed_bandwidth(size, size.grid, carried, CONDITIONS[contents.form])


def unremovable_of(contents: PlantSetFields) -> Unremovable:
    """Return what of a set's nominal the standard loop has to carry.

    Raises
    ------
    InputError
        If the nominal is unstable.
    """
    return unremovable(_Size(contents).around, contents)


def unremovable(around: Surroundings, contents: PlantSetFields) -> Unremovable:
    """Return delay, right half-plane zeros and integrators of a stable scalar nominal.

    Zeros a thousand times beyond the band lag by less than a thousandth of a radian in it; those
    of a realisation's rounding are as far, so they are left out.
    """
    top = TWO_PI * contents.band[1]
    found = zeros(contents.nominal, top)
    right = found[(found.real > 0.0) & (np.abs(found) < FARTHEST_ZERO * top)]
    at_rest = int(np.sum(np.abs(around.nominal_poles) <= around.rest))
    return Unremovable(_conjugate_closed(right), contents.nominal.delay, at_rest)


def _conjugate_closed(roots: ComplexArray) -> ComplexArray:
    real = roots[roots.imag == 0.0]
    upper = roots[roots.imag > 0.0]
    return np.asarray(np.concatenate([real, upper, upper.conj()]), dtype=complex)


def setters_between(contents: PlantSetFields, low: float, high: float) -> str:
    """Say which responses set the radius from `low` to `high` Hz, most frequent first, or "".

    For the ends of sentences: it starts with a semicolon.
    """
    radii = contents.radii
    inside = (radii.frequency >= low) & (radii.frequency <= high)
    names = [name for name, here in zip(radii.set_by, inside, strict=True) if here and name]
    if not names:
        return ""
    ranked = sorted(set(names), key=lambda name: (-names.count(name), name))
    more = f" and {len(ranked) - 3} more" if len(ranked) > 3 else ""
    return f"; radius set there by {', '.join(ranked[:3])}{more}"


class _Size:
    """|W|, or |W/P0| for additive sets, as a function of frequency."""

    def __init__(self, contents: PlantSetFields) -> None:
        refuse_price(contents)
        self.around = Surroundings(contents)
        unstable = count_unstable(self.around.nominal_poles, self.around.rest)
        if unstable:
            expected = "none: the yardstick does not cover unstable plants"
            raise InputError(Problem("nominal", f"{unstable} unstable poles", expected))
        self.additive = contents.form == "additive"
        low, high = self.around.band
        wide = (BELOW * low, ABOVE * high)
        self.grid = np.unique(np.concatenate([self.around.common_grid, even_grid(wide, 60)]))
        poles = self.around.nominal_poles
        near = clustered(poles[poles.imag >= 0.0], wide)
        self.grid = np.unique(np.concatenate([self.grid, near]))

    def weight(self, frequency: FloatArray) -> FloatArray:
        """Return |W| at (points,) Hz."""
        _, left, right = self.around.at(frequency)
        return np.abs((left * right)[:, 0, 0])

    def __call__(self, frequency: FloatArray) -> FloatArray:
        nominal, left, right = self.around.at(frequency)
        weight = np.abs((left * right)[:, 0, 0])
        return weight / np.abs(nominal[:, 0, 0]) if self.additive else weight


def refuse_price(contents: PlantSetFields) -> None:
    """Refuse sets that the yardstick does not cover.

    Raises
    ------
    InputError
        For sets with real factors, matrix plants and sampled sets.
    """
    if contents.form not in CONDITIONS:
        expected = f"one of {', '.join(CONDITIONS)} for the bandwidth a set allows"
        raise InputError(Problem("form", repr(contents.form), expected))
    if not contents.is_scalar:
        found = f"{len(contents.outputs)} outputs and {len(contents.inputs)} inputs"
        raise InputError(Problem("set", found, "one output and one input"))
    if contents.time.period > 0.0:
        raise InputError(Problem("time", "a sampled set", "a set in continuous time"))
