"""Leaving each unit out in turn: the reach it has from the set made of the others.

The nominal without the unit is solved exactly at the population's own variances
(methods/case_deletion.py); a nominal that was searched ("tightest") is kept. The weight is refitted
to the radius without the unit, of the order and profile of the released one, on the points of the
bound; between those points nothing is tested. Every unit is judged by another set, so this is an
estimate of what the released set does, not a statement about it: M. Stone, "Cross-validatory choice
and assessment of statistical predictions", Journal of the Royal Statistical Society B 36 (1974)
111-147.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import xarray as xr

from identkit.errors import InfeasibleError
from identkit.forms.nominal_plant import NominalPlant
from identkit.forms.radius_curve import RadiusCurve, decibels
from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.magnitude_weight import MagnitudeWeight, fit_magnitude_weight
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.stages.fitted_plants import fitted_plants
from identkit.stages.nominal import nominal_plant
from identkit.stages.population_model import PopulationModel

MOST_UNITS = 100
TOLERANCE_DB = 0.1
_PER_MODE = ("modal_frequency", "damping_ratio", "residue")


@dataclass(frozen=True)
class LeaveOneOut:
    """Reach of every unit against the set of the others.

    Attributes
    ----------
    reach
        Largest reach over the responses of each unit left out, by name.
    units
        Units of the set; more than were tried where the campaign is large.
    nominal_refitted
        Whether the nominal was made without the unit, too.
    relief_db
        By how much the required radius falls without each unit, mean over log frequency, dB; below
        zero where the nominal without the unit stands worse to the others.
    """

    reach: dict[str, float]
    units: int
    nominal_refitted: bool
    relief_db: dict[str, float] = field(default_factory=dict)


def leave_one_unit_out(
    modes: xr.Dataset,
    nominal: xr.Dataset,
    bound: xr.Dataset,
    model: PopulationModel,
    *,
    radius_floor: float = 0.02,
    seed: int = 1,
) -> LeaveOneOut:
    """Return the reach of every unit from the set that the other units give.

    Parameters
    ----------
    modes, nominal, bound
        As the stages wrote them; only responses that the bound used count.
    model
        The population they are of.
    radius_floor
        As the bound had it.
    seed
        Of the choice of 100 units where there are more.

    Notes
    -----
    A ceiling of the weight is not asked for again. The time grows with units tried times plants.
    """
    used = np.flatnonzero(bound["response_used"].values.astype(bool))
    plants = fitted_plants(modes)
    unit_of = _unit_of(model, modes, used)
    chosen = _chosen(unit_of, seed)
    centre = nominal_plant(nominal)
    refit = str(nominal.attrs["choice"]) == "centre"
    nominals = [_without(centre, model, u) if refit else centre for u in chosen]
    place = {index: k for k, index in enumerate(plants.index)}
    groups = [[plants.parameters[place[i]] for i in used[unit_of == u]] for u in np.unique(unit_of)]
    frequency = np.asarray(bound["frequency"].values, dtype=float)
    own, others = _errors(frequency, groups, np.unique(unit_of), chosen, nominals)
    radius = np.maximum(others, radius_floor)
    names = [model.units[u] for u in chosen]
    return LeaveOneOut(
        dict(zip(names, _reaches(bound, own, radius).tolist(), strict=True)),
        len(groups),
        refit,
        dict(zip(names, _relief(bound, radius).tolist(), strict=True)),
    )


def _unit_of(model: PopulationModel, modes: xr.Dataset, used: IntArray) -> IntArray:
    """Return the unit of every used response."""
    units = dict(zip(model.responses, model.design.unit.tolist(), strict=True))
    names = modes["response"].values.astype(str)[used]
    return np.array([units[name] for name in names], dtype=np.int64)


def _chosen(unit_of: IntArray, seed: int) -> IntArray:
    everyone = np.unique(unit_of)
    if everyone.size <= MOST_UNITS:
        return everyone
    drawn = np.random.default_rng(seed).choice(everyone, MOST_UNITS, replace=False)
    return np.asarray(np.sort(drawn), dtype=np.int64)


def _without(centre: NominalPlant, model: PopulationModel, unit: int) -> NominalPlant:
    """Return the centre of the population without one unit."""
    laws = {law.name: law for law in model.laws}
    changed: dict[str, object] = {
        name: np.array([laws[f"{mode}:{name}"].without(unit) for mode in model.modes])
        for name in _PER_MODE
    }
    base = [name.removeprefix("base:") for name in laws if name.startswith("base:")]
    changed |= {name: laws[f"base:{name}"].without(unit) for name in base}
    return NominalPlant(replace(centre.parameters, **changed), centre.delay_order)  # type: ignore[arg-type]


def _errors(
    frequency: FloatArray,
    groups: Sequence[Sequence[ModalParameters]],
    units: IntArray,
    chosen: IntArray,
    nominals: Sequence[NominalPlant],
) -> tuple[FloatArray, FloatArray]:
    """Return (chosen, points) largest error of the unit itself and of all the others."""
    centres = [nominal.response(frequency) for nominal in nominals]
    own = np.zeros((len(chosen), frequency.size))
    others = np.zeros_like(own)
    for unit, group in zip(units, groups, strict=True):
        responses = np.array([modal_response(frequency, plant) for plant in group])
        for row, (left, centre) in enumerate(zip(chosen, centres, strict=True)):
            error = np.abs(responses / centre - 1.0).max(axis=0)
            into = own if left == unit else others
            np.maximum(into[row], error, out=into[row])
    return own, others


def _reaches(bound: xr.Dataset, own: FloatArray, radius: FloatArray) -> FloatArray:
    """Return the reach of each unit against a weight refitted to the radius of the others."""
    frequency = np.asarray(bound["frequency"].values, dtype=float)
    profile = np.asarray(bound["allowed_excess"].values, dtype=float)
    order = int(bound["weight_order"])
    required = np.asarray(bound["required_radius"].values, dtype=float)
    start = _fitted(frequency, required, profile, order, None)
    reach = np.empty(len(own))
    for row, (error, needed) in enumerate(zip(own, radius, strict=True)):
        weight = _fitted(frequency, needed, profile, order, start)
        magnitude = weight.magnitude(frequency)
        magnitude = magnitude * max(1.0, float(np.max(needed / magnitude)))
        reach[row] = np.max(error / magnitude)
    return reach


def _relief(bound: xr.Dataset, radius: FloatArray) -> FloatArray:
    """Return the mean fall of the required radius over log frequency, dB, for each unit."""
    log_frequency = np.log(bound["frequency"].values)
    fall = decibels(bound["required_radius"].values / radius)
    span = log_frequency[-1] - log_frequency[0]
    return np.asarray(np.trapezoid(fall, log_frequency, axis=1) / span, dtype=float)


def _fitted(
    frequency: FloatArray,
    radius: FloatArray,
    profile: FloatArray,
    order: int,
    start: MagnitudeWeight | None,
) -> MagnitudeWeight:
    some = RadiusCurve(frequency, radius, np.zeros(frequency.size, dtype=np.int64)).decisive()
    points = (frequency[some], radius[some], order)
    try:
        return fit_magnitude_weight(
            *points, profile=profile[some], tolerance_db=TOLERANCE_DB, start=start
        )
    except InfeasibleError:
        return fit_magnitude_weight(*points, profile=profile[some], tolerance_db=TOLERANCE_DB)
