"""Bound: the tightest weight that holds every plant, between the points as well as on them."""

from collections.abc import Mapping, Sequence

import numpy as np
import xarray as xr

from identkit.batch import one_thread
from identkit.errors import InputError, Problem
from identkit.forms.bounding import BoundOptions, SpreadBound, bound_plants
from identkit.forms.catalogue import form_named
from identkit.forms.comparison import CommonPart
from identkit.forms.multiplicative import NAME
from identkit.forms.radius_curve import interpolated
from identkit.methods.arrays import FloatArray
from identkit.methods.modal_model import TWO_PI, ModalParameters
from identkit.methods.modal_transfer import modal_zeros
from identkit.methods.resonance_grid import resonance_grid
from identkit.methods.winding_number import turns_around_zero
from identkit.stages.attribution import attribution_table, nearest_modes
from identkit.stages.fitted_plants import FittedPlants, fitted_plants
from identkit.stages.nominal import nominal_plant

METHOD = (
    "level test by eigenvalues (Boyd, Balakrishnan & Kabamba 1989; Bruinsma & Steinbuch 1990) "
    "on every plant; delays by all-pass of stated error"
)


def bound_spread(
    modes: xr.Dataset,
    nominal: xr.Dataset,
    *,
    form: str = NAME,
    order: str | int = "auto",
    profile: Sequence[tuple[float, float]] = ((100.0, 1.0), (1000.0, 3.0)),
    cap: Sequence[tuple[float, float]] = (),
    radius_floor: float = 0.02,
    left_out: Mapping[str, str] | None = None,
    jobs: int = 1,
) -> xr.Dataset:
    """Bound the spread of all fitted plants around the nominal by one weight of least excess.

    The weight is globally optimal for its order on the points (linear programs); between the points
    the exact norm of error / W of every plant is computed and points are added until every plant
    is held.

    Parameters
    ----------
    modes
        Paired modes; extra modes count.
    nominal
        As `choose_nominal` wrote it.
    form
        "multiplicative" and "input-multiplicative": P = P0 (1 + W Delta); "additive":
        P = P0 + W Delta; "inverse-multiplicative": P = P0 / (1 + W Delta).
    order
        "auto", or the order of the weight.
    profile
        Pairs (Hz, allowed excess): what is minimised is the largest |W| / (radius profile); linear
        over log frequency, ends held.
    cap
        Pairs (Hz, largest |W|), likewise.
    radius_floor
        Smallest radius ever bounded; of an additive set, as a share of |P0| at each frequency.
    left_out
        Reasons by response id of what stays out; nothing else does.
    jobs
        Threads; the result does not depend on it.

    Returns
    -------
    Dataset
        Along ``frequency``: ``required_radius``, ``radius_setter`` (response id, empty where the
        radius floor sets it), ``weight_magnitude``, ``allowed_excess``. ``weight_A`` ...
        ``weight_D``, ``weight_pole``, ``weight_zero`` (rad/s), ``weight_gain``, ``weight_order``,
        ``excess_db``, ``floor_db``, ``gap_db``, ``damping_cost_db`` (the part of the gap spent on
        the damping floor of poles and zeros). Along ``trial``: ``trial_order``,
        ``trial_excess_db``, ``trial_floor_db``. Along ``response``: ``reach``,
        ``reach_frequency``, ``reach_mode``, ``response_used``, ``exclusion_reason``,
        ``unstable_poles``; ``nominal_unstable_poles``. ``between_grid_worst`` and
        ``between_grid_tolerance``. Along ``interval``: who sets the bound where.

    Raises
    ------
    InfeasibleError
        If no weight of the order stays below the cap; names the frequency.
    InputError
        If the form or the shape is not covered, or no plant is left.
    """
    chosen = form_named(form)
    chosen.accepts(modes.sizes["output"], modes.sizes["input"], str(modes.attrs["base"]))
    centre = nominal_plant(nominal)
    band = nominal.attrs["band"]
    common = CommonPart(centre, float(band[0]), float(band[1]), chosen)
    known = fitted_plants(modes).without(left_out or {})
    frequency = _points(known, nominal["frequency"].values, common)
    plants = _counted(known, frequency, common)
    options = BoundOptions(order, tuple(profile), tuple(cap), radius_floor, jobs)
    # Many small matrices: threads inside the linear algebra would only wait for each other.
    with one_thread():
        found = bound_plants(plants.parameters, common, frequency, options, plants.names)
    return xr.merge(
        [
            _curves(found, plants, options),
            _weight(found),
            _reaches(found, plants, modes, nominal),
            attribution_table(found, plants.names, nominal),
        ]
    ).assign_attrs(
        form=form,
        band=[common.low, common.high],
        order_rule=found.rule,
        between_grid_method=_method(found),
        refits=found.rounds,
        held=len(plants.names),
        of=modes.sizes["response"],
    )


def _method(found: SpreadBound) -> str:
    searched = sum(not peak.exact for peak in found.peaks)
    return f"{METHOD}; {searched} of them on a fine grid instead" if searched else METHOD


def _points(plants: FittedPlants, grid: FloatArray, common: CommonPart) -> FloatArray:
    """Return the points to begin with: for inverse errors dense at the zeros of plants as well."""
    if not common.form.counts_turns:
        return grid
    zeros = np.concatenate([modal_zeros(plant) for plant in plants.parameters])
    zeros = zeros[(zeros != 0.0) & (np.abs(zeros) < 4.0 * TWO_PI * common.high)]
    size = np.abs(zeros)
    return resonance_grid(common.low, common.high, size / TWO_PI, zeros.real / size, grid)


def _counted(plants: FittedPlants, frequency: FloatArray, common: CommonPart) -> FittedPlants:
    """Take out plants that no set of this form around this nominal can hold."""
    reasons = {
        name: reason
        for name, plant in zip(plants.names, plants.parameters, strict=True)
        if (reason := _no_member(plant, frequency, common))
    }
    counted = plants.without(reasons)
    if not counted.parameters:
        raise InputError(Problem("[bound] exclude", "no plant left to hold", "at least one"))
    return counted


def _no_member(plant: ModalParameters, frequency: FloatArray, common: CommonPart) -> str:
    expected, own = unstable_poles(common.nominal.parameters), unstable_poles(plant)
    if own != expected:
        return f"{own} unstable poles, the nominal has {expected}"
    if not common.form.counts_turns:
        return ""
    turns = turns_around_zero(1.0 + common.error(frequency, plant))
    if not turns:
        return ""
    return "its response turns around zero beside the nominal's, which no inverse set holds"


def unstable_poles(plant: ModalParameters) -> int:
    """Return how many poles of a plant lie in the right half-plane: two per negative damping."""
    damping = plant.damping_ratio
    if plant.base == "pivot":
        damping = np.append(damping, plant.base_damping_ratio)
    return 2 * int(np.sum(damping < 0.0))


def _curves(found: SpreadBound, plants: FittedPlants, options: BoundOptions) -> xr.Dataset:
    names = np.array([*plants.names, ""], dtype=object)
    curve = found.curve
    data = xr.Dataset(
        {
            "required_radius": ("frequency", curve.required),
            "radius_setter": ("frequency", names[curve.setter].astype(str)),
            "weight_magnitude": ("frequency", found.weight.magnitude(curve.frequency)),
            "allowed_excess": ("frequency", interpolated(options.profile, curve.frequency)),
        },
        coords={"frequency": curve.frequency},
    )
    data["frequency"].attrs["units"] = "Hz"
    return data


def _weight(found: SpreadBound) -> xr.Dataset:
    weight = found.weight
    a, b, c, d = weight.state_space()
    return xr.Dataset(
        {
            "weight_A": (("weight_state", "weight_state_other"), a),
            "weight_B": (("weight_state", "weight_input"), b),
            "weight_C": (("weight_output", "weight_state"), c),
            "weight_D": (("weight_output", "weight_input"), d),
            "weight_pole": ("weight_root", np.asarray(weight.poles, dtype=complex)),
            "weight_zero": ("weight_root", np.asarray(weight.zeros, dtype=complex)),
            "weight_gain": ((), weight.gain),
            "weight_order": ((), weight.order),
            "excess_db": ((), weight.excess_db),
            "floor_db": ((), weight.floor_db),
            "gap_db": ((), weight.gap_db),
            "damping_cost_db": ((), weight.damping_cost_db),
            "trial_order": ("trial", [trial.order for trial in found.trials]),
            "trial_excess_db": ("trial", [trial.excess_db for trial in found.trials]),
            "trial_floor_db": ("trial", [trial.floor_db for trial in found.trials]),
            "between_grid_worst": ((), max(peak.ratio for peak in found.peaks)),
            "between_grid_tolerance": ((), found.tolerance),
        }
    )


def _reaches(
    found: SpreadBound, plants: FittedPlants, modes: xr.Dataset, nominal: xr.Dataset
) -> xr.Dataset:
    count = modes.sizes["response"]
    reach, frequency = np.full(count, np.nan), np.full(count, np.nan)
    index = list(plants.index)
    reach[index] = [peak.ratio for peak in found.peaks]
    frequency[index] = [peak.frequency for peak in found.peaks]
    names = modes["response"].values.astype(str)
    everyone = fitted_plants(modes)
    unstable = np.zeros(count, dtype=np.int64)
    unstable[list(everyone.index)] = [unstable_poles(plant) for plant in everyone.parameters]
    used = np.isin(np.arange(count), index)
    labels = {name: label for name, label in modes.coords.items() if label.dims == ("response",)}
    return xr.Dataset(
        {
            "reach": ("response", reach),
            "reach_frequency": ("response", frequency),
            "reach_mode": ("response", nearest_modes(frequency, nominal)),
            "response_used": ("response", used),
            "exclusion_reason": ("response", [plants.missing.get(name, "") for name in names]),
            "unstable_poles": ("response", unstable),
            "nominal_unstable_poles": ((), unstable_poles(nominal_plant(nominal).parameters)),
        },
        coords=labels,
    )
