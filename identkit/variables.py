"""The dictionary of the project: every labelled variable once, with dims, unit and meaning.

Checks of what a stage is given and the page on file formats are both made from it.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import xarray as xr

from identkit.errors import InputError, MissingStageError, Problem

POINT = ("response", "output", "input", "frequency")
PER_MODE = ("response", "mode")
PER_CHANNEL = ("response", "output", "input")
PER_MODE_CHANNEL = ("response", "mode", "output", "input")
PER_QUANTITY = ("mode", "quantity")

_KINDS = {
    "complex": ("complex numbers", "c"),
    "number": ("floating-point numbers", "fiu"),
    "whole": ("whole numbers", "iu"),
    "flag": ("true or false", "b"),
    "text": ("text", "UOT"),
}
_RATIO = "output/input"
_RESIDUE = "output/input (rad/s)^2"


@dataclass(frozen=True)
class Variable:
    """One labelled variable.

    Attributes
    ----------
    name
        As it stands in the file.
    dims
        Its dimensions, in order.
    kind
        "complex", "number", "whole", "flag" or "text".
    unit
        Physical unit; "1" for ratios, empty where there is none.
    meaning
        One sentence.
    optional
        Whether a file may be without it.
    """

    name: str
    dims: tuple[str, ...]
    kind: str
    unit: str
    meaning: str
    optional: bool = False


def _along(dims: tuple[str, ...], *rows: tuple[str, str, str, str]) -> tuple[Variable, ...]:
    """Return variables along the same dims from (name, kind, unit, meaning); ? marks optional."""
    return tuple(
        Variable(name.rstrip("?"), dims, kind, unit, meaning, name.endswith("?"))
        for name, kind, unit, meaning in rows
    )


LABELS = (
    *_along(
        ("response",),
        ("response", "text", "", "Name of a response, unique in the study."),
        ("unit?", "text", "", "The unit measured."),
        ("head?", "text", "", "The head measured."),
        ("temperature?", "number", "degC", "Temperature of the unit."),
        ("position?", "number", "as given", "Radial position."),
        ("lot?", "text", "", "Production lot."),
        ("measured_at?", "text", "", "ISO date of the measurement."),
        ("repeat?", "text", "", "Which re-measurement of one thing."),
        ("fixture?", "text", "", "The fixture it was measured on."),
        ("source?", "text", "", "File, relative to the study's folder."),
    ),
    Variable("output", ("output",), "text", "", "Name of an output channel.", True),
    Variable("input", ("input",), "text", "", "Name of an input channel.", True),
)
_FREQUENCY = Variable("frequency", ("frequency",), "number", "Hz", "Increasing.")
_MODE_NAMES = Variable("mode", ("mode",), "text", "", "M1, M2 ... by population frequency.")

READ = (
    _FREQUENCY,
    *_along(
        POINT,
        ("frequency_response", "complex", _RATIO, "Measured response, convention e^{+jwt}."),
        (
            "frequency_response_variance?",
            "number",
            "(output/input)^2",
            "E|error|^2, total of both parts.",
        ),
        ("coherence?", "number", "1", "Magnitude-squared coherence."),
        ("usable_mask?", "flag", "", "Points that may be used."),
    ),
    Variable("averages", ("response",), "number", "1", "Number of averages.", True),
    Variable("image_error", POINT, "number", _RATIO, "What images may still add.", True),
    *_along(
        ("response",),
        ("estimator?", "text", "", "How it was estimated from time records."),
        ("estimator_reason?", "text", "", "Why so."),
        ("hold_treatment?", "text", "", "What was done about hold and images."),
        ("direct_bias_over_error?", "number", "1", "Bias of the direct estimate over its error."),
        ("runout?", "number", "output unit", "Repeatable runout taken out, peak to peak."),
        ("record_samples?", "whole", "", "Samples of all records behind a response."),
        ("drive_peak?", "number", "input unit", "Largest drive in them."),
        ("position_peak?", "number", "as the range", "Largest position in them."),
    ),
    Variable("second_opinion", ("response",), "text", "", "What became of it.", True),
    *_along(
        ("response", "subspace_mode"),
        ("subspace_frequency?", "number", "Hz", "A mode found by subspace identification."),
        ("subspace_damping_ratio?", "number", "1", "Its damping ratio."),
        ("subspace_frequency_error?", "number", "Hz", "Standard error of its frequency."),
    ),
    Variable("runout_harmonic", ("frequency",), "flag", "", "Line on a turn harmonic.", True),
    Variable(
        "line_correlation",
        ("response", "line_distance"),
        "number",
        "1",
        "Correlation of the errors of lines this far apart, from 0 on.",
        True,
    ),
    Variable("record_check", ("record_check",), "text", "", "What records are judged by.", True),
    *_along(
        ("response", "record_check"),
        ("record_mark?", "flag", "", "Whether the record is marked."),
        ("record_value?", "number", "1", "What the mark is judged by."),
        ("record_limit?", "number", "1", "The limit it is held to."),
    ),
)

SCREEN = (
    _FREQUENCY,
    *_along(
        POINT,
        ("usable_mask", "flag", "", "Points that the fit uses."),
        ("low_coherence_mask", "flag", "", "Points below the coherence limit."),
        ("outside_band_mask", "flag", "", "Points outside the band."),
        ("missing_mask", "flag", "", "Points without a usable value."),
    ),
    Variable("mark", ("mark",), "text", "", '"noise", "outlier" or "too-few-points".'),
    *_along(
        ("response", "mark"),
        ("response_mark", "flag", "", "Whether the mark is set."),
        ("response_mark_value", "number", "1", "What the mark is judged by."),
        ("response_mark_limit", "number", "1", "The limit it is held to."),
    ),
)

_MODES = (
    *_along(
        PER_MODE,
        ("modal_frequency", "number", "Hz", "Undamped frequency of a mode."),
        ("damping_ratio", "number", "1", "Damping ratio of a mode."),
        ("mode_significance", "number", "1", "Residue over its standard error."),
        ("mode_outcome?", "whole", "", "Outcome code of a mode."),
    ),
    *_along(
        PER_MODE_CHANNEL,
        ("residue", "number", _RESIDUE, "Residue of a mode."),
        ("residue_rate?", "number", "output/input rad/s", "Factor of jw in a residue."),
    ),
    *_along(
        PER_CHANNEL,
        ("base_gain?", "number", _RESIDUE, "g of a free base, g/s^2."),
        ("base_residue?", "number", _RESIDUE, "Residue of the pivot."),
        ("feedthrough", "number", _RATIO, "Direct term d."),
    ),
    *_along(
        ("response",),
        ("base_frequency?", "number", "Hz", "Frequency of the pivot."),
        ("base_damping_ratio?", "number", "1", "Damping ratio of the pivot."),
        ("delay", "number", "s", "Delay of the plant."),
        ("noise_ratio", "number", "1", "Reduced chi-square; missing where noise was estimated."),
        ("fit_outcome", "whole", "", "Outcome code of the fit."),
        ("usable_points", "whole", "", "Points the fit used."),
    ),
    Variable(
        "parameter_covariance",
        ("response", "parameter", "parameter_other"),
        "number",
        "own units",
        "Covariance of the fitted parameters, in the order of the response's own fit.",
    ),
    Variable("parameter", ("parameter",), "text", "", "Names of the fitted parameters.", True),
    Variable("parameter_other", ("parameter_other",), "text", "", "The same names.", True),
)
FIT = (
    *_MODES,
    Variable("mode", ("mode",), "whole", "", "Place of a mode, by frequency.", True),
    Variable("start_mode", PER_MODE, "whole", "", "Mode of the start it came from, -1 none.", True),
)

PAIR = (
    *_MODES,
    Variable("mode", ("mode",), "text", "", "M1, M2 ... by population frequency; E1 ... extra."),
    *_along(
        ("mode",),
        ("mode_in_population", "flag", "", "Whether the population has it."),
        ("mode_share?", "number", "1", "Share of responses of its best head that show it."),
    ),
    *_along(
        PER_MODE,
        ("mode_position", "whole", "", "Place in the response's own fit, -1 none."),
        ("modal_frequency_standard_error", "number", "Hz", "From the fit covariance."),
        ("damping_ratio_standard_error", "number", "1", "From the fit covariance."),
        ("mode_crossing_mask?", "flag", "", "Modes in another order than in the population."),
        ("mode_expected_frequency?", "number", "Hz", "Where the population has the mode."),
        ("mode_found_warm_mask?", "flag", "", "Found only when started from the population."),
    ),
    *_along(
        ("response",),
        ("unexplained_share?", "number", "1", "What the fit leaves of the response."),
    ),
    Variable(
        "residue_standard_error", PER_MODE_CHANNEL, "number", _RESIDUE, "From the fit covariance."
    ),
)

_STATISTICS = (
    ("population_value", "number", "own unit", "Mean at the reference temperature."),
    ("population_value_standard_error", "number", "own unit", "Standard error of that mean."),
    ("temperature_slope", "number", "1/K", "Relative change per kelvin."),
    ("temperature_slope_standard_error", "number", "1/K", "Standard error of that slope."),
    ("position_slope?", "number", "1/position", "Relative change per unit of position."),
    ("position_slope_standard_error?", "number", "1/position", "Standard error of that slope."),
    ("unit_deviation", "number", "1", "Between units, relative, one sigma."),
    ("unit_deviation_standard_error?", "number", "1", "Standard error of it."),
    ("head_deviation", "number", "1", "Between heads of one unit, relative, one sigma."),
    ("head_deviation_standard_error?", "number", "1", "Standard error of it."),
    ("residual_deviation", "number", "1", "What is left unexplained, relative, one sigma."),
    ("residual_deviation_standard_error?", "number", "1", "Standard error of it."),
    ("fit_deviation", "number", "1", "Measurement noise of a fit, relative, one sigma."),
)
_PLANT_SCALARS = (
    ("base_gain?", "number", _RESIDUE, "g of a free base, g/s^2."),
    ("base_frequency?", "number", "Hz", "Frequency of the pivot."),
    ("base_damping_ratio?", "number", "1", "Damping ratio of the pivot."),
    ("base_residue?", "number", _RESIDUE, "Residue of the pivot."),
    ("feedthrough", "number", _RATIO, "Direct term d."),
    ("delay", "number", "s", "Delay of the plant."),
)
POPULATION = (
    *_along(PER_QUANTITY, *_STATISTICS),
    *_along(
        ("base_quantity",), *((f"base_{row[0].rstrip('?')}?", *row[1:]) for row in _STATISTICS)
    ),
    *_along((), *_PLANT_SCALARS),
    *_along(
        ("mode",),
        ("responses_found", "whole", "", "Responses that show the mode."),
        ("responses_missing", "whole", "", "Responses that do not."),
        ("responses_shifted?", "whole", "", "Responses that show it far from the population."),
    ),
    *_along(
        ("mode", "quantity", "head"),
        ("head_value", "number", "own unit", "Mean of a head at the reference temperature."),
        ("head_value_standard_error?", "number", "own unit", "Standard error of that mean."),
    ),
    Variable("unit_effect", ("unit", "effect"), "number", "1", "Predicted effect of a unit.", True),
    Variable(
        "unit_effect_deviation", ("effect",), "number", "1", "Between units, one sigma.", True
    ),
    Variable(
        "unit_effect_correlation",
        ("effect", "effect_other"),
        "number",
        "1",
        "Correlation of unit effects, shrunk.",
        True,
    ),
    Variable("unit_effect_shrinkage", (), "number", "1", "How far it was shrunk, 0 to 1.", True),
    Variable("lot_effect", ("lot", "effect"), "number", "1", "Mean unit effect of a lot.", True),
    Variable(
        "lot_chance",
        ("lot", "effect"),
        "number",
        "1",
        "Probability, over all lots and effects, that chance alone sets the lot so far apart.",
        True,
    ),
    _MODE_NAMES,
    Variable("quantity", ("quantity",), "text", "", "What of a mode: its frequency, damping ..."),
    Variable("base_quantity", ("base_quantity",), "text", "", "What beside the modes.", True),
    Variable("head", ("head",), "text", "", "The heads.", True),
    Variable("unit", ("unit",), "text", "", "The units.", True),
    Variable("lot", ("lot",), "text", "", "The lots.", True),
    Variable("effect", ("effect",), "text", "", "Mode (or base) and quantity.", True),
    Variable("effect_other", ("effect_other",), "text", "", "The same.", True),
)

NOMINAL = (
    _FREQUENCY,
    _MODE_NAMES,
    Variable("nominal_A", ("nominal_state", "nominal_state_other"), "number", "1/s", "State."),
    Variable("nominal_B", ("nominal_state", "input"), "number", "mixed", "Input."),
    Variable("nominal_C", ("output", "nominal_state"), "number", "mixed", "Output."),
    Variable("nominal_D", ("output", "input"), "number", _RATIO, "Direct term."),
    *_along(
        ("mode",),
        ("modal_frequency", "number", "Hz", "Undamped frequency of a mode of the nominal."),
        ("damping_ratio", "number", "1", "Damping ratio of a mode of the nominal."),
    ),
    *_along(
        ("mode", "output", "input"),
        ("residue", "number", _RESIDUE, "Residue of a mode of the nominal."),
        ("residue_rate?", "number", "output/input rad/s", "Factor of jw in a residue."),
    ),
    *_along((), *_PLANT_SCALARS),
    *_along(
        (),
        ("delay_order", "whole", "", "Order of the all-pass that stands for the delay."),
        ("floor_distance_peak_db", "number", "dB", "Largest distance from the floor."),
        ("floor_distance_mean_db", "number", "dB", "Mean distance over log frequency."),
        ("centre_distance_peak_db", "number", "dB", "Largest distance of the centre."),
        ("centre_distance_mean_db", "number", "dB", "Mean distance of the centre."),
    ),
    *_along(
        ("frequency",),
        ("nominal_radius", "number", "1", "Largest |P/P0 - 1| of the plants."),
        ("radius_floor", "number", "1", "Least radius of any nominal at this frequency."),
        ("radius_floor_saturated", "flag", "", "Whether no nominal stays below 1."),
    ),
)

BOUND = (
    _FREQUENCY,
    *_along(
        ("frequency",),
        ("required_radius", "number", "1", "Radius the weight has to exceed."),
        ("radius_setter", "text", "", "Response that sets it; empty where the floor does."),
        ("weight_magnitude", "number", "1", "|W|."),
        ("allowed_excess", "number", "1", "Shape of the excess allowed."),
    ),
    Variable("weight_A", ("weight_state", "weight_state_other"), "number", "1/s", "State."),
    Variable("weight_B", ("weight_state", "weight_input"), "number", "mixed", "Input."),
    Variable("weight_C", ("weight_output", "weight_state"), "number", "mixed", "Output."),
    Variable("weight_D", ("weight_output", "weight_input"), "number", "1", "Direct term."),
    *_along(
        ("weight_root",),
        ("weight_pole", "complex", "rad/s", "Poles of the weight, stable."),
        ("weight_zero", "complex", "rad/s", "Zeros of the weight, minimum phase."),
    ),
    *_along(
        (),
        ("weight_gain", "number", "1", "Gain of the weight, zeros over poles."),
        ("weight_order", "whole", "", "Order of the weight."),
        ("excess_db", "number", "dB", "Largest excess of the weight over the radius profile."),
        ("floor_db", "number", "dB", "Proved lower bound of that at this order."),
        ("gap_db", "number", "dB", "Their difference."),
        ("damping_cost_db", "number", "dB", "Part of it spent on the damping of poles and zeros."),
        ("between_grid_worst", "number", "1", "Largest exact reach between the points."),
        ("between_grid_tolerance", "number", "1", "Tolerance of that norm."),
        ("nominal_unstable_poles", "whole", "", "Unstable poles of the nominal."),
    ),
    *_along(
        ("trial",),
        ("trial_order", "whole", "", "Orders tried."),
        ("trial_excess_db", "number", "dB", "Excess of each."),
        ("trial_floor_db", "number", "dB", "Proved lower bound of each."),
    ),
    *_along(
        ("form_trial",),
        ("form_trial_crossover?", "number", "Hz", "Crossover that the set of each form allows."),
        ("form_trial_left_out?", "whole", "", "Plants that each form alone leaves out."),
    ),
    *_along(
        ("response",),
        ("reach", "number", "1", "Smallest factor of the set that holds the fitted plant."),
        ("reach_frequency", "number", "Hz", "Where it is set."),
        ("reach_mode", "text", "", "The mode nearest to that."),
        ("response_used", "flag", "", "Whether the bound counts it."),
        ("exclusion_reason", "text", "", "Why not."),
        ("unstable_poles", "whole", "", "Unstable poles of the fitted plant."),
    ),
    *_along(
        ("interval",),
        ("interval_low", "number", "Hz", "Lower end of an interval with one setter."),
        ("interval_high", "number", "Hz", "Upper end."),
        ("interval_response", "text", "", "The response that sets the bound there."),
        ("interval_reach", "number", "1", "Its largest reach there."),
        ("interval_frequency", "number", "Hz", "Where it is largest."),
        ("interval_mode", "text", "", "The mode nearest to that."),
    ),
)

REPORT = _along(
    ("part",),
    ("part_kind", "text", "", "What is left out: a label, a mode's spread, or nothing."),
    ("part_value", "text", "", "Which one."),
    ("part_plants", "whole", "", "Plants that remain."),
    ("allowed_crossover", "number", "Hz", "Crossover the remaining radius allows at most."),
    ("limited_at", "number", "Hz", "Where it is limited."),
    ("peak_radius_db", "number", "dB", "Largest required radius."),
    ("mean_radius_db", "number", "dB", "Its mean over log frequency."),
)

VARIABLES: Mapping[str, tuple[Variable, ...]] = {
    "read": READ,
    "screen": SCREEN,
    "fit": FIT,
    "pair": PAIR,
    "population": POPULATION,
    "nominal": NOMINAL,
    "bound": BOUND,
    "report": REPORT,
}
FILES = {
    "read": "responses.nc",
    "screen": "screening.nc",
    "fit": "fits.nc",
    "pair": "modes.nc",
    "population": "population.nc",
    "nominal": "nominal.nc",
    "bound": "bound.nc",
    "report": "price.nc",
}


def check(
    dataset: xr.Dataset, names: Iterable[str], *, stage: str, asked_by: str, place: str = ""
) -> None:
    """Refuse a dataset that lacks a variable, or has it along other dims or of another kind.

    Parameters
    ----------
    dataset
        One frequency grid, or a table without one.
    names
        Variables that are needed.
    stage
        The stage that writes them.
    asked_by
        The stage that needs them.
    place
        File or dataset to name in messages; the stage's file by default.

    Raises
    ------
    MissingStageError
        If a variable is missing.
    InputError
        If a variable has wrong dimensions or the wrong kind of values.
    """
    known = {variable.name: variable for variable in (*LABELS, *VARIABLES[stage])}
    for name in names:
        if name not in dataset.variables:
            raise MissingStageError(stage, f"{asked_by} (for {name})")
        problem = _problem(dataset, known[name], place or FILES.get(stage, stage))
        if problem:
            raise InputError(problem)


def _problem(dataset: xr.Dataset, variable: Variable, place: str) -> Problem | None:
    there = dataset[variable.name]
    if there.dims != variable.dims:
        where = f"{place}, {variable.name}"
        return Problem(where, f"the dimensions {there.dims}", f"{variable.dims}")
    words, kinds = _KINDS[variable.kind]
    if there.dtype.kind not in kinds:
        return Problem(f"{place}, {variable.name}", f"values of type {there.dtype}", words)
    return None


def file_format_page() -> str:
    """Return the page on file formats in Markdown: one table per file."""
    parts = [
        "# Files of a results folder\n",
        "NetCDF-4 files; complex numbers are the compound type {r, i}. Responses on one frequency "
        "grid stand in the root group, on several in groups `grid_1`, `grid_2` ...\n",
        "## Labels along `response`, in every file\n\n" + _table(LABELS),
    ]
    parts += [
        f"## `{FILES.get(stage, stage)}`, written by {stage}\n\n" + _table(variables)
        for stage, variables in VARIABLES.items()
    ]
    return "\n".join(parts)


def _table(variables: Iterable[Variable]) -> str:
    rows = ["| variable | dimensions | values | unit | meaning |", "|---|---|---|---|---|"]
    for each in variables:
        meaning = each.meaning.replace("|", r"\|") + (" Optional." if each.optional else "")
        dims = ", ".join(each.dims) or "none"
        words = _KINDS[each.kind][0]
        rows.append(f"| `{each.name}` | {dims} | {words} | {each.unit} | {meaning} |")
    return "\n".join(rows) + "\n"
