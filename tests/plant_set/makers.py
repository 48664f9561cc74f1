"""Small plant sets made from plain arrays, so that the set file is tested without its builder."""

import sys
from dataclasses import replace

import numpy as np

from identkit.methods.magnitude_weight import fit_magnitude_weight
from identkit.plant_set import fields as f
from identkit.plant_set.claims import excess_db
from identkit.plant_set.interconnection import output_multiplicative
from identkit.plant_set.model import PlantSet
from identkit.plant_set.reach import Surroundings, reach_of_plants
from identkit.plant_set.response import plant_response
from identkit.plant_set.sample import series, static
from identkit.plant_set.schur import plant_matrices
from identkit.stages.export import extension_of

BAND = (50.0, 20_000.0)
FLOOR = 0.02


def plant(
    name: str,
    frequency: list[float],
    damping: list[float],
    residue: list[float],
    *,
    base: str = "pivot",
    delay: float = 0.0,
    labels: dict[str, str | float] | None = None,
) -> f.FittedPlant:
    """Make a scalar plant; the base has a fixed gain."""
    modes = len(frequency)
    gain = np.full((1, 1), 4.0e6)
    return f.FittedPlant(
        response=name,
        modal_frequency=np.array(frequency, dtype=float),
        damping_ratio=np.array(damping, dtype=float),
        residue=np.array(residue, dtype=float).reshape(modes, 1, 1),
        residue_rate=np.zeros((modes, 1, 1)),
        base=base,
        base_gain=gain if base == "free" else np.zeros((1, 1)),
        base_frequency=60.0 if base == "pivot" else 0.0,
        base_damping_ratio=0.3 if base == "pivot" else 0.0,
        base_residue=gain if base == "pivot" else np.zeros((1, 1)),
        feedthrough=np.full((1, 1), 1.0e-4),
        delay=delay,
        labels=labels or {},
        covariance=f.Covariance(("delay", "feedthrough"), np.array([[1e-16, 0.0], [0.0, 1e-12]])),
    )


def family(count: int, seed: int = 3, *, base: str = "pivot", spread: float = 0.01, modes: int = 4):
    """Draw plants around a common one."""
    generator = np.random.default_rng(seed)
    centre = np.geomspace(1500.0, 14_000.0, modes)
    plants = []
    for k in range(count):
        labels: dict[str, str | float] = {"unit": f"U{k // 2}", "head": str(k % 2)}
        if k % 3:
            labels["temperature"] = 25.0 + 10.0 * (k % 3)
        plants.append(
            plant(
                f"U{k // 2}/H{k % 2}",
                list(centre * np.exp(spread * generator.standard_normal(modes))),
                list(0.015 * np.exp(0.2 * generator.standard_normal(modes))),
                list(2.0e6 * (1.0 + 0.1 * generator.standard_normal(modes))),
                base=base,
                labels=labels,
            )
        )
    return plants


def nominal_plant(base: str = "pivot", modes: int = 4) -> f.FittedPlant:
    """Return the common plant, well damped so that its minima are not deep."""
    centre = np.geomspace(1500.0, 14_000.0, modes)
    return plant("nominal", list(centre), [0.03] * modes, [2.0e6] * modes, base=base)


def lead_weight(gain: float) -> f.Matrices:
    """Return gain (s + 2 pi 300) / (s + 2 pi 6000) twice: small at low frequency."""
    zero, pole = 2 * np.pi * 300.0, 2 * np.pi * 6000.0
    one = f.Matrices(
        np.array([[-pole]]), np.array([[pole]]), np.array([[(zero - pole) / pole]]), np.ones((1, 1))
    )
    twice = series(one, one)
    return f.Matrices(twice.A, twice.B, gain * twice.C, gain * twice.D)


def make_set(plants: list[f.FittedPlant], nominal: f.Matrices, weight: f.Matrices) -> PlantSet:
    """Put the fields together; the weight is scaled so that the largest reach is 1."""
    scaled = _fields(plants, nominal, weight)
    largest = float(reach_of_plants(scaled, plants).value.max())
    weight = replace(weight, C=weight.C * largest, D=weight.D * largest)
    grid = np.geomspace(*BAND, 300)
    return _finished(_fields(plants, nominal, weight), grid, np.ones(grid.size))


def _finished(
    contents: f.PlantSetFields,
    grid: np.ndarray,
    allowed_excess: np.ndarray,
    *,
    floor_db: float | None = None,
    extension: f.Extension | None = None,
) -> PlantSet:
    """State reach, radii and certificate."""
    reach = reach_of_plants(contents, contents.plants)
    plants = tuple(
        replace(item, reach=float(value), reach_frequency=float(frequency))
        for item, value, frequency in zip(
            contents.plants, reach.value, reach.frequency, strict=True
        )
    )
    radii = replace(_radii(contents, grid), allowed_excess=allowed_excess, extension=extension)
    whole = replace(contents, plants=plants, radii=radii)
    excess = excess_db(whole)
    floor_db = excess if floor_db is None else floor_db
    certificate = replace(
        contents.certificate,
        measured=f.Measured(len(plants), len(plants), len(set(radii.set_by) - {""})),
        between_grid=f.BetweenGrid("adaptive grid", float(reach.value.max()), 1e-6),
        optimality=f.Optimality(excess, floor_db, excess - floor_db, contents.weights.left.states),
    )
    best = plants[int(reach.value.argmax())]
    line = f.Attribution(best.response, best.reach_frequency, best.reach, "M1")
    return PlantSet(**{**vars(whole), "certificate": certificate, "attribution": (line,)})


def _radii(contents: f.PlantSetFields, grid: np.ndarray) -> f.Radii:
    nominal, left, _ = Surroundings(contents).at(grid)
    centre = nominal[:, 0, 0]
    errors = np.array(
        [np.abs(plant_response(p, grid)[0, 0] / centre - 1.0) for p in contents.plants]
    )
    largest, who = errors.max(axis=0), errors.argmax(axis=0)
    names = [
        contents.plants[k].response if r > FLOOR else "" for k, r in zip(who, largest, strict=True)
    ]
    return f.Radii(
        grid,
        np.maximum(largest, FLOOR),
        np.abs(left[:, 0, 0]),
        tuple(names),
        np.ones(grid.size),
        FLOOR,
    )


def optimal_set(
    plants: list[f.FittedPlant], nominal: f.Matrices, order: int, points: int = 240
) -> PlantSet:
    """Bound the plants as the project does: best weight on a grid, peaks between added, again."""
    one = static(np.eye(1))
    grid, fitted = np.geomspace(*BAND, points), None
    for _ in range(12):
        radii = _radii(_fields(plants, nominal, one), grid)
        profile = np.interp(np.log(grid), np.log([100.0, 1000.0]), [1.0, 3.0])
        fitted = fit_magnitude_weight(
            grid, radii.required_radius, order, profile=profile, start=fitted
        )
        weight = f.Matrices(*fitted.state_space())
        contents = _fields(plants, nominal, weight)
        reach = reach_of_plants(contents, plants)
        if reach.value.max() <= 1.0 + 1e-9:
            break
        grid = np.union1d(grid, reach.frequency[reach.value > 1.0 + 1e-9])
    return _finished(
        contents,
        grid,
        profile,
        floor_db=fitted.floor_db,
        extension=extension_of(grid, radii.required_radius, profile, None),
    )


def _fields(
    plants: list[f.FittedPlant], nominal: f.Matrices, weight: f.Matrices
) -> f.PlantSetFields:
    one = static(np.eye(1))
    empty = np.zeros(0)
    return f.PlantSetFields(
        form="multiplicative",
        time=f.TimeBase(),
        inputs=(f.Channel("drive", "A"),),
        outputs=(f.Channel("position", "um"),),
        band=BAND,
        nominal=f.Nominal(nominal.A, nominal.B, nominal.C, nominal.D),
        weights=f.Weights(weight, one),
        parameters=(),
        interconnection=output_multiplicative(nominal, weight, one),
        plants=tuple(plants),
        radii=f.Radii(empty, empty, empty, (), empty, FLOOR),
        certificate=f.Certificate(
            f.Measured(len(plants), len(plants), len(plants)),
            f.BetweenGrid("adaptive grid", 1.0, 1e-6),
            f.Optimality(3.0, 3.0, 0.0, 2),
            f.Envelope({"unit": ("U0", "U1")}, temperature=(25.0, 45.0)),
        ),
        attribution=(f.Attribution(plants[0].response, 1500.0, 1.0, "M1"),),
        provenance=f.Provenance({"a.csv": "0" * 64}, {"identkit": "0"}, {"seed": 1}, "2026-01-01"),
    )


def small() -> PlantSet:
    """Return a set of eight plants with four modes."""
    return make_set(family(8), plant_matrices(nominal_plant()), lead_weight(1.0))


if __name__ == "__main__":
    optimal_set(family(24), plant_matrices(nominal_plant()), 6).save(sys.argv[1])
