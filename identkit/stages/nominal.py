"""Nominal: the one plant in the middle of the set, as it will be exported."""

from collections.abc import Mapping

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.forms.multiplicative import accepts, relative_errors
from identkit.forms.nominal_plant import NominalPlant
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import FloatArray
from identkit.methods.enclosing_disc import EnclosingDisc, enclosing_disc
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.pade_delay import pade_order
from identkit.methods.resonance_grid import resonance_grid
from identkit.methods.transmission_zeros import finite_zeros
from identkit.stages.fitted_plants import FittedPlants, fitted_plants

DELAY_TOLERANCE = 1e-3
SCALARS = (
    "base_gain",
    "base_frequency",
    "base_damping_ratio",
    "base_residue",
    "feedthrough",
    "delay",
)


def choose_nominal(
    modes: xr.Dataset,
    population: xr.Dataset,
    *,
    choice: str = "centre",
    band: tuple[float, float] | None = None,
    lines: FloatArray | None = None,
    left_out: Mapping[str, str] | None = None,
    radius_floor: float = 0.02,
    delay_tolerance: float = DELAY_TOLERANCE,
) -> xr.Dataset:
    """Choose the nominal plant and say how far any other could be better.

    "centre" is the population at its reference temperature: log frequency, log damping ratio and
    signed residue at their means. The delay becomes a Pade all-pass inside the matrices, of the
    lowest order whose error in the band is below `delay_tolerance`.

    Parameters
    ----------
    modes
        Paired modes.
    population
        Values at the reference temperature, as `describe_population` writes them.
    choice
        "centre".
    band
        Hz, in which everything is claimed; the ends of `lines` by default.
    lines
        (lines,) Hz, measured frequencies (see `measured_lines`).
    left_out
        Reasons by response id of what stays out of nominal and bound.
    radius_floor
        Smallest radius ever bounded; distances to the floor are not counted below it.
    delay_tolerance
        Largest error of the all-pass in the band; it ends up inside the bound.

    Returns
    -------
    Dataset
        ``nominal_A`` ... ``nominal_D``, the modal parameters of the nominal, ``delay_order``,
        ``frequency`` (dense near every resonance), ``nominal_radius`` = max_i |P_i/P0 - 1|,
        ``radius_floor`` (the least radius of any nominal at that frequency),
        ``radius_floor_saturated``, ``floor_distance_peak_db``, ``floor_distance_mean_db`` (mean
        over log frequency).

    Raises
    ------
    InputError
        If the choice is unknown, no response is left, or the delay is too long for the band.
    """
    if choice != "centre":
        raise InputError(Problem("[nominal] choice", repr(choice), '"centre"'))
    accepts(modes.sizes["output"], modes.sizes["input"])
    plants = fitted_plants(modes).without(left_out or {})
    if not plants.parameters:
        raise InputError(Problem("[bound] exclude", "every response left out", "one that counts"))
    low, high = _band(band, lines)
    nominal = _rational(population_centre(population), high, delay_tolerance)
    grid = _grid(plants, nominal, (low, high), lines)
    return _described(nominal, plants, grid, radius_floor, population).assign_attrs(
        choice=choice,
        band=[low, high],
        base=str(population.attrs["base"]),
        reference_temperature=float(population.attrs["reference_temperature"]),
        input_unit=str(modes.attrs.get("input_unit", "")),
        output_unit=str(modes.attrs.get("output_unit", "")),
    )


def measured_lines(responses: Gridded) -> FloatArray:
    """Return every measured frequency of all grids once, Hz."""
    return np.unique(np.concatenate([part["frequency"].values for part in datasets(responses)]))


def population_centre(population: xr.Dataset) -> ModalParameters:
    """Return the plant whose parameters are the population's at the reference temperature.

    Raises
    ------
    InputError
        If a value is missing.
    """
    value = population["population_value"]

    def column(name: str) -> FloatArray:
        return _finite(f"population, {name}", value.sel(quantity=name).values)

    def scalar(name: str) -> float:
        known = name in population
        return float(_finite(f"population, {name}", population[name].values)) if known else 0.0

    return ModalParameters(
        column("modal_frequency"),
        column("damping_ratio"),
        column("residue"),
        np.zeros(population.sizes["mode"]),
        str(population.attrs["base"]),
        *[scalar(name) for name in SCALARS],
    )


def nominal_plant(nominal: xr.Dataset) -> NominalPlant:
    """Return the nominal that `choose_nominal` described."""

    def column(name: str) -> FloatArray:
        values = np.asarray(nominal[name].values, dtype=float)
        return values.reshape(nominal.sizes["mode"], -1)[:, 0]

    parameters = ModalParameters(
        column("modal_frequency"),
        column("damping_ratio"),
        column("residue"),
        column("residue_rate"),
        str(nominal.attrs["base"]),
        *[float(nominal[name].values) for name in SCALARS],
    )
    return NominalPlant(parameters, int(nominal["delay_order"].values))


def _finite(place: str, values: object) -> FloatArray:
    found = np.asarray(values, dtype=float)
    if not np.all(np.isfinite(found)):
        raise InputError(Problem(place, "a missing value", "a number"))
    return found


def _band(band: tuple[float, float] | None, lines: FloatArray | None) -> tuple[float, float]:
    if band is not None:
        return float(band[0]), float(band[1])
    if lines is None or not np.any(lines > 0.0):
        raise InputError(
            Problem("[responses] band", "no band and no measured lines", "one of them")
        )
    return float(np.min(lines[lines > 0.0])), float(np.max(lines))


def _rational(centre: ModalParameters, high: float, tolerance: float) -> NominalPlant:
    try:
        return NominalPlant(centre, pade_order(TWO_PI * high * centre.delay, tolerance))
    except ValueError as error:
        expected = "a shorter delay, or a lower upper end of the band"
        raise InputError(Problem("population, delay", str(error), expected)) from error


def _grid(
    plants: FittedPlants,
    nominal: NominalPlant,
    band: tuple[float, float],
    lines: FloatArray | None,
) -> FloatArray:
    zeros = finite_zeros(nominal.realisation(), 4.0 * TWO_PI * band[1])
    everyone = (*plants.parameters, nominal.parameters)
    frequency = [plant.modal_frequency for plant in everyone]
    damping = [plant.damping_ratio for plant in everyone]
    if nominal.parameters.base == "pivot":
        frequency.append(np.array([plant.base_frequency for plant in everyone]))
        damping.append(np.array([plant.base_damping_ratio for plant in everyone]))
    size = np.abs(zeros)
    return resonance_grid(
        *band,
        np.concatenate([*frequency, size / TWO_PI]),
        np.concatenate([*damping, zeros.real / size]),
        lines,
    )


def _described(
    nominal: NominalPlant,
    plants: FittedPlants,
    grid: FloatArray,
    least: float,
    population: xr.Dataset,
) -> xr.Dataset:
    radius = np.abs(relative_errors(grid, plants.parameters, nominal)).max(axis=0)
    disc = enclosing_disc(np.array([modal_response(grid, plant) for plant in plants.parameters]))
    peak, mean = floor_distance(grid, radius, disc, least)
    data = xr.Dataset(
        {
            **_matrices(nominal),
            **_parameters(nominal),
            "nominal_radius": ("frequency", radius),
            "radius_floor": ("frequency", disc.radius),
            "radius_floor_saturated": ("frequency", disc.saturated),
            "floor_distance_peak_db": ((), peak),
            "floor_distance_mean_db": ((), mean),
        },
        coords={"frequency": grid, "mode": population["mode"].values.astype(str)},
    )
    data["frequency"].attrs["units"] = "Hz"
    return data


def floor_distance(
    frequency: FloatArray, radius: FloatArray, disc: EnclosingDisc, least: float
) -> tuple[float, float]:
    """Return peak and mean over log frequency of radius over floor, dB, neither below `least`."""
    distance = 20.0 * np.log10(np.maximum(radius, least) / np.maximum(disc.radius, least))
    log_frequency = np.log(frequency)
    span = log_frequency[-1] - log_frequency[0]
    return float(distance.max()), float(np.trapezoid(distance, log_frequency) / span)


def _matrices(nominal: NominalPlant) -> dict[str, tuple[tuple[str, ...], FloatArray]]:
    system = nominal.realisation()
    return {
        "nominal_A": (("nominal_state", "nominal_state_other"), system.A),
        "nominal_B": (("nominal_state", "input"), system.B),
        "nominal_C": (("output", "nominal_state"), system.C),
        "nominal_D": (("output", "input"), system.D),
    }


def _parameters(nominal: NominalPlant) -> dict[str, object]:
    plant = nominal.parameters
    per_mode = {
        "modal_frequency": ("mode", plant.modal_frequency),
        "damping_ratio": ("mode", plant.damping_ratio),
        "residue": (("mode", "output", "input"), plant.residue[:, None, None]),
        "residue_rate": (("mode", "output", "input"), plant.residue_rate[:, None, None]),
    }
    scalars = {name: ((), float(getattr(plant, name))) for name in SCALARS}
    return {**per_mode, **scalars, "delay_order": ((), nominal.delay_order)}
