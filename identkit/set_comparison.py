"""Two sets compared: does one contain the other, where not, whose plants are out, and the price.

At one frequency the plants of a scalar set with one dynamic block fill a disc: of P for additive
and multiplicative sets, of 1/P for inverse multiplicative ones (there 1/P = (1 + W Delta)/P0).
Every point of the disc is taken by some stable block of norm at most 1, so one set contains
another in a band exactly where disc lies in disc,

    |centre B - centre A| + radius B <= radius A,

with as many unstable poles. (|P0B - P0A| + |WB P0B|)/|WA P0A| is then the reach of the whole set B
in A: the smallest scaling of A that holds it. A disc that does not hold the origin turns into a
disc under 1/P (conformal mapping; K. Knopp, *Elements of the Theory of Functions*, 1952, ch. 5).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.plant_set.fields import FittedPlant, PlantSetFields
from identkit.plant_set.model import PlantSet
from identkit.plant_set.peaks import highest
from identkit.plant_set.reach import Surroundings, count_unstable, reach_of_plants
from identkit.set_price import CONDITIONS, SetPrice, price_of_set
from identkit.set_resonances import Resonances, resonances

INVERSE = "inverse-multiplicative"
ROUNDING = 1e-9
BISECTIONS = 40
SAME_MODE = 0.12


@dataclass(frozen=True, eq=False)
class Containment:
    """Whether one set holds all of another within their common band.

    Attributes
    ----------
    reach, frequency
        Smallest scaling of the outer set that holds the inner one, and where (Hz); infinite where
        the inner set has members of any size or another number of unstable poles.
    outside
        Intervals (Hz) in which the inner set sticks out.
    """

    reach: float
    frequency: float
    outside: tuple[tuple[float, float], ...]

    @property
    def holds(self) -> bool:
        """Whether the outer set holds the inner one."""
        return self.reach <= 1.0 + ROUNDING


@dataclass(frozen=True, eq=False)
class ListedReach:
    """Reach in one set of the plants that another lists and did not leave out.

    Attributes
    ----------
    names, units
        (plants,) response and unit.
    value, frequency
        (plants,) reach, and where, Hz.
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    value: FloatArray
    frequency: FloatArray


@dataclass(frozen=True)
class ModeChange:
    """One resonance of both nominals, and the listed plants' own around it.

    Attributes
    ----------
    name
        Name of the mode in the first set; empty where it cannot be told.
    frequency, damping_ratio
        Of the nominals, first and second; Hz and 1. NaN where the second has none.
    spread
        Largest relative distance of the listed plants from their nominal, first and second.
    """

    name: str
    frequency: tuple[float, float]
    damping_ratio: tuple[float, float]
    spread: tuple[float, float]


@dataclass(frozen=True, eq=False)
class SetComparison:
    """Two sets, a and b.

    Attributes
    ----------
    band
        Hz, where both claim something.
    b_in_a, a_in_b
        Containment either way.
    listed_b, listed_a
        Reach of b's listed plants in a, and of a's in b.
    modes
        Resonances of a, beside those of b.
    new_units, gone_units
        Units measured for b only, and for a only.
    price_a, price_b
        None where the yardstick does not cover the set.
    """

    band: tuple[float, float]
    b_in_a: Containment
    a_in_b: Containment
    listed_b: ListedReach
    listed_a: ListedReach
    modes: tuple[ModeChange, ...]
    new_units: tuple[str, ...]
    gone_units: tuple[str, ...]
    price_a: SetPrice | None
    price_b: SetPrice | None

    @property
    def holds(self) -> bool:
        """Whether one of the two contains the other."""
        return self.b_in_a.holds or self.a_in_b.holds


def compare_sets(a: PlantSet, b: PlantSet) -> SetComparison:
    """Say whether one scalar set contains another, what changed, and what it costs.

    Parameters
    ----------
    a, b
        Sets of the same time base and physical units, each with one dynamic block.

    Raises
    ------
    InputError
        If the two cannot be compared; says why.
    """
    _refuse(a, b)
    band = (max(a.band[0], b.band[0]), min(a.band[1], b.band[1]))
    if band[0] >= band[1]:
        found = f"{b.band[0]:g} to {b.band[1]:g} Hz"
        expected = f"a band that meets {a.band[0]:g} to {a.band[1]:g} Hz"
        raise InputError(Problem("band of the second set", found, expected))
    first, second = Surroundings(a), Surroundings(b)
    return SetComparison(
        band=band,
        b_in_a=containment(first, second, band),
        a_in_b=containment(second, first, band),
        listed_b=_listed(a, b),
        listed_a=_listed(b, a),
        modes=_mode_changes(a, b),
        new_units=tuple(sorted(_units(b) - _units(a))),
        gone_units=tuple(sorted(_units(a) - _units(b))),
        price_a=_price(a),
        price_b=_price(b),
    )


def containment(outer: Surroundings, inner: Surroundings, band: tuple[float, float]) -> Containment:
    """Return the reach of a whole set in another over a band, refined between grid points."""
    low, high = max(band[0], outer.band[0], inner.band[0]), band[1]
    grid = np.unique(np.concatenate([outer.common_grid, inner.common_grid, [low, high]]))
    grid = grid[(grid >= low) & (grid <= high)]
    values = reach_of_set(outer, inner, grid)
    top, where = highest(grid[None], values[None], lambda _, f: reach_of_set(outer, inner, f))
    counts = [count_unstable(each.nominal_poles, each.rest) for each in (outer, inner)]
    reach = float(top[0]) if counts[0] == counts[1] else np.inf
    return Containment(reach, float(where[0]), _outside(outer, inner, grid, values))


def reach_of_set(outer: Surroundings, inner: Surroundings, frequency: FloatArray) -> FloatArray:
    """Return the smallest scaling of `outer` that holds all of `inner`, at (points,) Hz."""
    centre, radius, _ = _disc(outer, frequency)
    other, spread, inverse = _disc(inner, frequency)
    if inverse != (outer.form == INVERSE):
        other, spread = _inverted(other, spread)
    with np.errstate(invalid="ignore"):
        reach = (np.abs(other - centre) + spread) / radius
    return np.asarray(np.where(np.isnan(reach), np.inf, reach))


def _disc(around: Surroundings, frequency: FloatArray) -> tuple[ComplexArray, FloatArray, bool]:
    """Return centre and radius of the disc of P, or of 1/P (then True)."""
    nominal, left, right = (part[:, 0, 0] for part in around.at(frequency))
    weight = np.abs(left * right)
    if around.form == "additive":
        return nominal, weight, False
    inverse = around.form == INVERSE
    centre = 1.0 / nominal if inverse else nominal
    return centre, weight * np.abs(centre), inverse


def _inverted(centre: ComplexArray, radius: FloatArray) -> tuple[ComplexArray, FloatArray]:
    """Return the disc of the reciprocals; an infinite radius where the origin lies inside."""
    gap = np.abs(centre) ** 2 - radius**2
    safe = np.where(gap > 0.0, gap, 1.0)
    spread = np.where(gap > 0.0, radius / safe, np.inf)
    return np.asarray(np.conj(centre) / safe), np.asarray(spread)


def _outside(
    outer: Surroundings, inner: Surroundings, grid: FloatArray, values: FloatArray
) -> tuple[tuple[float, float], ...]:
    """Return the intervals of reach above 1, their ends bisected between grid points."""
    over = np.concatenate([[False], values > 1.0 + ROUNDING, [False]])
    starts, ends = np.flatnonzero(~over[:-1] & over[1:]), np.flatnonzero(over[:-1] & ~over[1:])

    def edge(held: float, out: float) -> float:
        for _ in range(BISECTIONS):
            middle = 0.5 * (held + out)
            if reach_of_set(outer, inner, np.array([middle]))[0] > 1.0 + ROUNDING:
                out = middle
            else:
                held = middle
        return out

    last = grid.size - 1
    return tuple(
        (
            edge(float(grid[start - 1]), float(grid[start])) if start > 0 else float(grid[0]),
            edge(float(grid[end]), float(grid[end - 1])) if end <= last else float(grid[last]),
        )
        for start, end in zip(starts.tolist(), ends.tolist(), strict=True)
    )


def _counted(contents: PlantSetFields) -> list[FittedPlant]:
    out = {each.label for each in contents.certificate.measured.excluded}
    return [plant for plant in contents.plants if plant.response not in out]


def _listed(outer: PlantSet, inner: PlantSet) -> ListedReach:
    plants = _counted(inner)
    found = reach_of_plants(outer, plants)
    units = tuple(str(plant.labels.get("unit", plant.response)) for plant in plants)
    return ListedReach(
        tuple(plant.response for plant in plants), units, found.value, found.frequency
    )


def _units(contents: PlantSetFields) -> set[str]:
    named = contents.certificate.envelope.labels.get("unit", ())
    listed = {str(plant.labels["unit"]) for plant in contents.plants if "unit" in plant.labels}
    return {str(name) for name in named} | listed


def _price(contents: PlantSetFields) -> SetPrice | None:
    try:
        return price_of_set(contents)
    except InputError:
        return None


def _mode_changes(a: PlantSet, b: PlantSet) -> tuple[ModeChange, ...]:
    first, second = resonances(a), resonances(b)
    return tuple(_change(k, first, second, _counted(a), _counted(b)) for k in range(_size(first)))


def _size(known: Resonances) -> int:
    return int(known.frequency.size)


def _change(
    k: int,
    first: Resonances,
    second: Resonances,
    plants_a: Sequence[FittedPlant],
    plants_b: Sequence[FittedPlant],
) -> ModeChange:
    at = float(first.frequency[k])
    there, damping = np.nan, np.nan
    if second.frequency.size:
        nearest = int(np.argmin(np.abs(np.log(second.frequency / at))))
        if abs(np.log(second.frequency[nearest] / at)) < SAME_MODE:
            there = float(second.frequency[nearest])
            damping = float(second.damping_ratio[nearest])
    return ModeChange(
        first.names[k],
        (at, there),
        (float(first.damping_ratio[k]), damping),
        (_spread(plants_a, at), _spread(plants_b, there)),
    )


def _spread(plants: Sequence[FittedPlant], at: float) -> float:
    """Return the largest relative distance from `at` of the plants' nearest modes, up to 12 %."""
    if not at > 0.0:
        return np.nan
    apart = [
        float(np.min(np.abs(np.log(plant.modal_frequency / at)), initial=np.inf))
        for plant in plants
    ]
    near = [distance for distance in apart if distance < SAME_MODE]
    return max(near, default=np.nan)


def _refuse(a: PlantSet, b: PlantSet) -> None:
    for place, each in (("first set", a), ("second set", b)):
        if each.form not in CONDITIONS or len(each.interconnection.blocks) != 1:
            expected = f"one of {', '.join(CONDITIONS)}"
            raise InputError(Problem(f"form of the {place}", repr(each.form), expected))
        if not each.is_scalar:
            found = f"{len(each.outputs)} outputs and {len(each.inputs)} inputs"
            raise InputError(Problem(place, found, "one output and one input"))
    if abs(a.time.period - b.time.period) > 1e-9 * max(a.time.period, b.time.period):
        found, expected = f"{b.time.period:g} s", f"{a.time.period:g} s, as in the first set"
        raise InputError(Problem("period of the second set", found, expected))
    units = [tuple(channel.unit for channel in (*s.inputs, *s.outputs)) for s in (a, b)]
    if units[0] != units[1]:
        expected = f"{' and '.join(units[0])}, as in the first set"
        raise InputError(Problem("units of the second set", " and ".join(units[1]), expected))


def frequencies(a: PlantSet, b: PlantSet, band: tuple[float, float]) -> FloatArray:
    """Return frequencies (Hz) fine enough to draw both sets over a band."""
    grid = np.unique(np.concatenate([Surroundings(a).common_grid, Surroundings(b).common_grid]))
    return np.asarray(grid[(grid >= band[0]) & (grid <= band[1])])
