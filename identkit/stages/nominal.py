"""Nominal: the one plant in the middle of the set, as it will be exported."""

from collections.abc import Mapping, Sequence

import numpy as np
import xarray as xr

from identkit.batch import one_thread
from identkit.errors import InputError, Problem
from identkit.forms.multiplicative import accepts, relative_errors
from identkit.forms.nominal_plant import NominalPlant
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import FloatArray
from identkit.methods.enclosing_disc import EnclosingDisc, enclosing_disc
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.modal_transfer import modal_zeros
from identkit.methods.pade_delay import pade_order
from identkit.methods.resonance_grid import resonance_grid
from identkit.methods.tightest_nominal import tightest_nominal
from identkit.stages.fitted_plants import FittedPlants, fitted_plants

DELAY_TOLERANCE = 1e-3
CHOICES = ("centre", "tightest")
SEARCH_STRIDE = 3
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
    lowest order whose error in the band is below `delay_tolerance`. "tightest" moves the modes,
    residues and feedthrough of the centre for the least radius over the band, peaks above 1
    counting more (least p-th approximation, Bandler & Charalambous 1972); its modes need no longer
    be those of any plant.

    Parameters
    ----------
    modes
        Paired modes.
    population
        Values at the reference temperature, as `describe_population` writes them.
    choice
        "centre" or "tightest".
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
        over log frequency), and both distances of the centre, ``centre_distance_peak_db`` and
        ``centre_distance_mean_db``.

    Raises
    ------
    InputError
        If the choice is unknown, no response is left, or the delay is too long for the band.
    """
    if choice not in CHOICES:
        raise InputError(Problem("[nominal] choice", repr(choice), " or ".join(CHOICES)))
    accepts(modes.sizes["output"], modes.sizes["input"])
    plants = fitted_plants(modes).without(left_out or {})
    if not plants.parameters:
        raise InputError(Problem("[bound] exclude", "every response left out", "one that counts"))
    low, high = _band(band, lines)
    nominal = centre = _rational(population_centre(population), high, delay_tolerance)
    # Many small matrices: threads inside the linear algebra would only wait for each other.
    with one_thread():
        grid = _grid(plants, [centre], (low, high), lines)
        if choice == "tightest":
            scale = _residue_scale(modes, population, plants)
            nominal = _tightest(centre, plants, grid, scale, radius_floor)
            grid = _grid(plants, [centre, nominal], (low, high), lines)
        data = _described(nominal, centre, plants, grid, radius_floor, population)
    return data.assign_attrs(
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
        return values[:, 0, 0] if values.ndim == 3 else values

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
    nominals: Sequence[NominalPlant],
    band: tuple[float, float],
    lines: FloatArray | None,
) -> FloatArray:
    zeros = np.concatenate([modal_zeros(each.parameters) for each in nominals])
    zeros = zeros[(zeros != 0.0) & (np.abs(zeros) < 4.0 * TWO_PI * band[1])]
    everyone = (*plants.parameters, *[each.parameters for each in nominals])
    frequency = [plant.modal_frequency for plant in everyone]
    damping = [plant.damping_ratio for plant in everyone]
    if nominals[0].parameters.base == "pivot":
        frequency.append(np.array([plant.base_frequency for plant in everyone]))
        damping.append(np.array([plant.base_damping_ratio for plant in everyone]))
    size = np.abs(zeros)
    return resonance_grid(
        *band,
        np.concatenate([*frequency, size / TWO_PI]),
        np.concatenate([*damping, zeros.real / size]),
        lines,
    )


def _residue_scale(modes: xr.Dataset, population: xr.Dataset, plants: FittedPlants) -> FloatArray:
    """Return the median size of every population mode's residue over the plants that count."""
    chosen = modes["residue"].isel(response=list(plants.index)).sel(mode=population["mode"].values)
    sizes = np.abs(chosen.transpose("response", "mode", "output", "input").values[:, :, 0, 0])
    return np.asarray(np.nanmedian(sizes, axis=0), dtype=float)


def _tightest(
    centre: NominalPlant, plants: FittedPlants, grid: FloatArray, scale: FloatArray, least: float
) -> NominalPlant:
    coarse = np.unique(np.append(grid[::SEARCH_STRIDE], grid[-1]))
    values = np.array([modal_response(coarse, plant) for plant in plants.parameters])
    order = centre.delay_order
    found = tightest_nominal(coarse, values, centre.parameters, order, scale, least)
    return NominalPlant(found.parameters, order)


def _described(
    nominal: NominalPlant,
    centre: NominalPlant,
    plants: FittedPlants,
    grid: FloatArray,
    least: float,
    population: xr.Dataset,
) -> xr.Dataset:
    radius = np.abs(relative_errors(grid, plants.parameters, nominal)).max(axis=0)
    disc = enclosing_disc(np.array([modal_response(grid, plant) for plant in plants.parameters]))
    peak, mean = floor_distance(grid, radius, disc, least)
    usual = np.abs(relative_errors(grid, plants.parameters, centre)).max(axis=0)
    usual_peak, usual_mean = floor_distance(grid, usual, disc, least)
    data = xr.Dataset(
        {
            **_matrices(nominal),
            **_parameters(nominal),
            "nominal_radius": ("frequency", radius),
            "radius_floor": ("frequency", disc.radius),
            "radius_floor_saturated": ("frequency", disc.saturated),
            "floor_distance_peak_db": ((), peak),
            "floor_distance_mean_db": ((), mean),
            "centre_distance_peak_db": ((), usual_peak),
            "centre_distance_mean_db": ((), usual_mean),
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
