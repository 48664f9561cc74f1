"""What a set file says about itself, worked out again from its own numbers.

Every check uses physics (plants, weight, radii), none a digest: a weight that was scaled no longer
covers its radii, a plant that was changed or taken out no longer attains the radius it set.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from identkit.plant_set.fields import (
    LISTED_AT_MOST,
    ComplexArray,
    FittedPlant,
    FloatArray,
    Matrices,
    PlantSetFields,
)
from identkit.plant_set.pointwise import pointwise_reach
from identkit.plant_set.reach import Reach, Surroundings, reach_of_plants
from identkit.plant_set.response import nominal_response, set_points, state_space_response
from identkit.plant_set.sample import draw_members
from identkit.plant_set.schur import zeros
from identkit.plant_set.stacked import plants_at

ROUNDING = 1e-6
DECIBEL_ROUNDING = 1e-3
_NEAR_THE_BOUND = 0.99
_REACH_ROUNDING = 1e-4
_TRIALS = 3
_PLANTS_AT_ONCE = 64


@dataclass(frozen=True)
class FailedCheck:
    """A claim of the set that its own numbers do not bear out.

    Attributes
    ----------
    claim
        Field of the file.
    found, expected
        What stands there, and what its own numbers give.
    """

    claim: str
    found: str
    expected: str

    def __str__(self) -> str:
        return f"{self.claim}: found {self.found}; its own numbers give {self.expected}"


def check_claims(contents: PlantSetFields, reach: Reach | None = None) -> list[FailedCheck]:
    """Check every claim of a set that can be worked out again from the file.

    Parameters
    ----------
    contents
        The set.
    reach
        Reach of the listed plants where it is known already.
    """
    known = reach_of_plants(contents, contents.plants) if reach is None else reach
    failed = check_reach(contents, known)
    for check in CHECKS:
        failed += check(contents)
    return failed


def check_weights(contents: PlantSetFields) -> list[FailedCheck]:
    """Check that weights are stable and minimum phase."""
    failed = []
    for side in ("left", "right"):
        weight: Matrices | None = getattr(contents.weights, side)
        if weight is None:
            continue
        far = 2.0 * np.pi * contents.band[1]
        poles = np.linalg.eigvals(weight.A).astype(complex)
        for word, roots in (("pole", poles), ("zero", zeros(weight, far))):
            if _outside(roots, contents.time.period):
                where = "outside the circle" if contents.time.period else "right of the axis"
                failed.append(FailedCheck(f"weights.{side}", f"a {word} {where}", "none"))
    return failed


def check_weight_curve(contents: PlantSetFields) -> list[FailedCheck]:
    """Check that the weight is as listed, covers every radius and keeps its ceiling."""
    radii = contents.radii
    if not radii.frequency.size:
        return []
    weight = _magnitude(contents, radii.frequency)
    failed = []
    off = np.abs(radii.weight_magnitude / weight - 1.0)
    if off.max() > ROUNDING:
        failed.append(_at("radii.weight_magnitude", radii.weight_magnitude, weight, off, contents))
    short = radii.required_radius / weight - 1.0
    if short.max() > ROUNDING:
        worst = _at("radii.required_radius", radii.required_radius, weight, short, contents)
        failed.append(FailedCheck(worst.claim, worst.found, f"a weight of {worst.expected}"))
    if radii.ceiling is not None and (weight / radii.ceiling).max() > 1.0 + ROUNDING:
        over = weight / radii.ceiling
        failed.append(_at("radii.ceiling", radii.ceiling, weight, over, contents))
    return failed


def check_radii(contents: PlantSetFields) -> list[FailedCheck]:
    """Check that every radius is attained by the plant that sets it and exceeded by none held."""
    radii = contents.radii
    if not radii.frequency.size:
        return []
    listed = [plant.response for plant in contents.plants]
    places = {name: index for index, name in enumerate(listed)}
    missing = {name for name in radii.set_by if name and name not in places}
    cut = max(contents.certificate.measured.setting - LISTED_AT_MOST, 0)
    failed = []
    if len(missing) > cut:
        names = ", ".join(sorted(missing)[:5])
        found = f"radii set by plants that are not listed ({names})"
        failed.append(FailedCheck("radii.set_by", found, f"at most {cut} of them unlisted"))
    errors = errors_at(contents, radii.frequency)
    held = np.array([name not in _excluded(contents) for name in listed], dtype=bool)
    largest = np.max(np.vstack([errors[held], floor_at(contents, radii.frequency)]), axis=0)
    tolerance = _tolerance(contents)
    over = largest / radii.required_radius - 1.0
    if over.max() > tolerance:
        failed.append(_at("radii.required_radius", radii.required_radius, largest, over, contents))
    own = np.array(
        [errors[places[n], k] if n in places else np.nan for k, n in enumerate(radii.set_by)]
    )
    off = np.nan_to_num(np.abs(own / radii.required_radius - 1.0))
    if off.max() > tolerance:
        failed.append(_at("radii.set_by", radii.required_radius, own, off, contents))
    return failed


def check_optimality(contents: PlantSetFields) -> list[FailedCheck]:
    """Check that the excess is that of radii and weight, and excess - floor the gap."""
    stated = contents.certificate.optimality
    failed = []
    excess = excess_db(contents)
    if np.isfinite(excess) and abs(stated.excess_db - excess) > DECIBEL_ROUNDING:
        name = "certificate.optimality.excess_db"
        failed.append(FailedCheck(name, f"{stated.excess_db:.4f}", f"{excess:.4f}"))
    gap = stated.excess_db - stated.floor_db
    if abs(gap - stated.gap_db) > DECIBEL_ROUNDING or stated.gap_db < -DECIBEL_ROUNDING:
        name = "certificate.optimality.gap_db"
        failed.append(FailedCheck(name, f"{stated.gap_db:.4f}", f"{gap:.4f}, not negative"))
    left = contents.weights.left
    if left is not None and left.states != stated.order:
        name = "certificate.optimality.order"
        failed.append(FailedCheck(name, str(stated.order), f"{left.states} states of the weight"))
    return failed


def check_interconnection(contents: PlantSetFields) -> list[FailedCheck]:
    """Check with random members that the interconnection makes the plants of the form."""
    if contents.form not in MEMBERS:
        return []
    frequency = np.geomspace(*_positive(contents.band), 40)
    points = set_points(contents, frequency)
    nominal = np.moveaxis(nominal_response(contents, frequency), -1, 0)
    _, left, right = Surroundings(contents).at(frequency)
    worst = 0.0
    for member in draw_members(contents, _TRIALS, seed=0):
        delta = _side(member.delta[0], points)
        direct = MEMBERS[contents.form](nominal, left @ delta @ right)
        made = np.moveaxis(member.frequency_response(frequency), -1, 0)
        size = np.abs(direct).max(axis=(1, 2), keepdims=True)
        worst = max(worst, float((np.abs(made - direct) / size).max()))
    if worst > ROUNDING:
        expected = f"those of form {contents.form}"
        return [FailedCheck("interconnection", f"members off by {worst:.2g}", expected)]
    return []


MEMBERS: dict[str, Callable[[ComplexArray, ComplexArray], ComplexArray]] = {
    "additive": lambda nominal, error: nominal + error,
    "multiplicative": lambda nominal, error: nominal + error @ nominal,
    "input-multiplicative": lambda nominal, error: nominal + nominal @ error,
    "inverse-multiplicative": lambda nominal, error: np.asarray(
        np.linalg.solve(np.eye(nominal.shape[-1]) + error, nominal), dtype=complex
    ),
}
"""The plant that L Delta R makes of the nominal, by form; (points, outputs, inputs)."""


def check_reach(contents: PlantSetFields, reach: Reach) -> list[FailedCheck]:
    """Check that listed plants have the reach they carry, and are held unless excluded.

    To the stated tolerance near the bound, to 1e-4 (relative) for plants that reach less than 0.99.
    """
    failed = []
    tolerance = _tolerance(contents)
    out = _excluded(contents)
    for plant, value in zip(contents.plants, reach.value, strict=True):
        name = f"plants, {plant.response}, reach"
        # Builder and audit both search for peaks; far below 1 neither needs to find the very top.
        near = max(value, plant.reach) >= _NEAR_THE_BOUND
        allowed = tolerance if near else max(tolerance, _REACH_ROUNDING)
        if not abs(value - plant.reach) <= allowed * max(plant.reach, 1e-3):
            failed.append(FailedCheck(name, f"{plant.reach:.8g}", f"{value:.8g}"))
        elif value > 1.0 + tolerance and plant.response not in out:
            failed.append(FailedCheck(name, "claimed held", f"{value:.8g}, more than 1"))
    return failed


def check_counts(contents: PlantSetFields) -> list[FailedCheck]:
    """Check that the counts of the certificate fit the radii and the plants."""
    measured = contents.certificate.measured
    setting = {name for name in contents.radii.set_by if name}
    failed = []
    if len(setting) != measured.setting:
        name = "certificate.measured.setting"
        failed.append(FailedCheck(name, str(measured.setting), f"{len(setting)} in radii.set_by"))
    listed = {plant.response for plant in contents.plants} - _excluded(contents)
    least = max(measured.setting, len(listed))
    if not least <= measured.held <= measured.of:
        name = "certificate.measured.held"
        failed.append(FailedCheck(name, str(measured.held), f"from {least} to {measured.of}"))
    return failed


CHECKS: tuple[Callable[[PlantSetFields], list[FailedCheck]], ...] = (
    check_weights,
    check_weight_curve,
    check_radii,
    check_optimality,
    check_interconnection,
    check_counts,
)


def errors_at(contents: PlantSetFields, frequency: FloatArray) -> FloatArray:
    """Return the reach of the listed plants under a weight of 1, (plants, points)."""
    if not contents.plants:
        return np.zeros((0, frequency.size))
    nominal = np.moveaxis(nominal_response(contents, frequency), -1, 0)
    one = np.eye(nominal.shape[-2], dtype=complex)
    one = np.broadcast_to(one, (frequency.size, *one.shape))
    pieces: list[FloatArray] = []
    for start in range(0, len(contents.plants), _PLANTS_AT_ONCE):
        some: Sequence[FittedPlant] = contents.plants[start : start + _PLANTS_AT_ONCE]
        response = plants_at(some, frequency, contents.time.period)
        pieces.append(pointwise_reach(contents.form, response, nominal, one, one))
    return np.concatenate(pieces)


def floor_at(contents: PlantSetFields, frequency: FloatArray) -> FloatArray:
    """Return the smallest radius ever bounded, (points,): of an additive set a share of |P0|."""
    share = np.full(frequency.size, contents.radii.floor)
    if contents.form != "additive" or not contents.is_scalar:
        return share
    return np.asarray(share * np.abs(nominal_response(contents, frequency)[0, 0]))


def excess_db(contents: PlantSetFields) -> float:
    """Return the largest 20 log10 of weight over radius times allowed excess, at the radii."""
    radii = contents.radii
    if not radii.frequency.size:
        return float("nan")
    allowed = radii.required_radius * radii.allowed_excess
    return float(20.0 * np.log10((_magnitude(contents, radii.frequency) / allowed).max()))


def _magnitude(contents: PlantSetFields, frequency: FloatArray) -> FloatArray:
    _, left, right = Surroundings(contents).at(frequency)
    return np.asarray(np.abs(left[:, 0, 0] * right[:, 0, 0]))


def _outside(roots: ComplexArray, period: float) -> bool:
    return bool(np.any(np.abs(roots) >= 1.0 if period > 0.0 else roots.real >= 0.0))


def _side(weight: Matrices, points: ComplexArray) -> ComplexArray:
    return np.moveaxis(state_space_response(weight, points), -1, 0)


def _tolerance(contents: PlantSetFields) -> float:
    return ROUNDING + contents.certificate.between_grid.tolerance


def _excluded(contents: PlantSetFields) -> set[str]:
    return {item.label for item in contents.certificate.measured.excluded}


def _positive(band: tuple[float, float]) -> tuple[float, float]:
    return max(band[0], 1e-4 * band[1]), band[1]


def _at(
    name: str, stated: FloatArray, own: FloatArray, badness: FloatArray, contents: PlantSetFields
) -> FailedCheck:
    k = int(np.argmax(badness))
    place = f"{name} at {contents.radii.frequency[k]:.6g} Hz"
    return FailedCheck(place, f"{stated[k]:.8g}", f"{own[k]:.8g}")
