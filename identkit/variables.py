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


LABELS = (
    Variable("response", ("response",), "text", "", "Name of a response, unique in the study."),
    Variable("unit", ("response",), "text", "", "The unit measured.", True),
    Variable("head", ("response",), "text", "", "The head measured.", True),
    Variable("temperature", ("response",), "number", "degC", "Temperature of the unit.", True),
    Variable("position", ("response",), "number", "as given", "Radial position.", True),
    Variable("lot", ("response",), "text", "", "Production lot.", True),
    Variable("measured_at", ("response",), "text", "", "ISO date of the measurement.", True),
    Variable("repeat", ("response",), "text", "", "Which re-measurement of one thing.", True),
    Variable("fixture", ("response",), "text", "", "The fixture it was measured on.", True),
    Variable("source", ("response",), "text", "", "File, relative to the study's folder.", True),
    Variable("output", ("output",), "text", "", "Name of an output channel.", True),
    Variable("input", ("input",), "text", "", "Name of an input channel.", True),
)

READ = (
    Variable("frequency", ("frequency",), "number", "Hz", "Increasing."),
    Variable("frequency_response", POINT, "complex", _RATIO, "Measured response, e^{+jwt}."),
    Variable(
        "frequency_response_variance",
        POINT,
        "number",
        "(output/input)^2",
        "E|error|^2, total of both parts.",
        True,
    ),
    Variable("coherence", POINT, "number", "1", "Magnitude-squared coherence.", True),
    Variable("averages", ("response",), "number", "1", "Number of averages.", True),
    Variable("usable_mask", POINT, "flag", "", "Points that may be used.", True),
)

SCREEN = (
    Variable("usable_mask", POINT, "flag", "", "Points that the fit uses."),
    Variable("low_coherence_mask", POINT, "flag", "", "Points below the coherence limit."),
    Variable("outside_band_mask", POINT, "flag", "", "Points outside the band."),
    Variable("missing_mask", POINT, "flag", "", "Points without a finite value."),
    Variable("mark", ("mark",), "text", "", '"noise", "outlier" or "too-few-points".'),
    Variable("response_mark", ("response", "mark"), "flag", "", "Whether the mark is set."),
    Variable(
        "response_mark_value", ("response", "mark"), "number", "1", "What the mark is judged by."
    ),
    Variable(
        "response_mark_limit", ("response", "mark"), "number", "1", "The limit it is held to."
    ),
)

_MODES = (
    Variable("modal_frequency", PER_MODE, "number", "Hz", "Undamped frequency of a mode."),
    Variable("damping_ratio", PER_MODE, "number", "1", "Damping ratio of a mode."),
    Variable("residue", PER_MODE_CHANNEL, "number", _RESIDUE, "Residue of a mode."),
    Variable(
        "residue_rate",
        PER_MODE_CHANNEL,
        "number",
        "output/input (rad/s)",
        "Factor of jw in the residue of a generally damped mode.",
        True,
    ),
    Variable("mode_significance", PER_MODE, "number", "1", "Residue over its standard error."),
    Variable("mode_outcome", PER_MODE, "whole", "", "Outcome code of a mode.", True),
)
_BASE = (
    Variable("base_gain", PER_CHANNEL, "number", _RESIDUE, "g of a free base, g/s^2.", True),
    Variable("base_frequency", ("response",), "number", "Hz", "Frequency of the pivot.", True),
    Variable("base_damping_ratio", ("response",), "number", "1", "Damping of the pivot.", True),
    Variable("base_residue", PER_CHANNEL, "number", _RESIDUE, "Residue of the pivot.", True),
    Variable("feedthrough", PER_CHANNEL, "number", _RATIO, "Direct term d."),
    Variable("delay", ("response",), "number", "s", "Delay of the plant."),
    Variable(
        "parameter_covariance",
        ("response", "parameter", "parameter_other"),
        "number",
        "",
        "Covariance of the fitted parameters, each in its own unit, in the order of the fit.",
    ),
    Variable(
        "noise_ratio",
        ("response",),
        "number",
        "1",
        "Reduced chi-square; missing where the variance was estimated from residuals.",
    ),
    Variable("fit_outcome", ("response",), "whole", "", "Outcome code of the fit."),
    Variable("usable_points", ("response",), "whole", "", "Points the fit used."),
)
FIT = _MODES + _BASE

PAIR = (
    *FIT,
    Variable("mode", ("mode",), "text", "", "M1, M2 ... by population frequency; E1 ... extra."),
    Variable("mode_in_population", ("mode",), "flag", "", "Whether the population has it."),
    Variable("mode_position", PER_MODE, "whole", "", "Place in the response's own fit, -1 none."),
    Variable(
        "modal_frequency_standard_error", PER_MODE, "number", "Hz", "From the fit covariance."
    ),
    Variable("damping_ratio_standard_error", PER_MODE, "number", "1", "From the fit covariance."),
    Variable(
        "residue_standard_error", PER_MODE_CHANNEL, "number", _RESIDUE, "From the fit covariance."
    ),
)

POPULATION = (
    Variable(
        "population_value", PER_QUANTITY, "number", "own unit", "Mean at the reference temperature."
    ),
    Variable(
        "population_value_standard_error", PER_QUANTITY, "number", "own unit", "Of that mean."
    ),
    Variable("temperature_slope", PER_QUANTITY, "number", "1/K", "Relative change per kelvin."),
    Variable("temperature_slope_standard_error", PER_QUANTITY, "number", "1/K", "Of that slope."),
    Variable("unit_deviation", PER_QUANTITY, "number", "1", "Between units, relative, 1 sigma."),
    Variable("head_deviation", PER_QUANTITY, "number", "1", "Between heads of one unit."),
    Variable("residual_deviation", PER_QUANTITY, "number", "1", "What is left unexplained."),
    Variable("fit_deviation", PER_QUANTITY, "number", "1", "Measurement noise, from the fits."),
    Variable("responses_found", ("mode",), "whole", "", "Responses that show the mode."),
    Variable("responses_missing", ("mode",), "whole", "", "Responses that do not."),
    Variable("head_value", ("mode", "quantity", "head"), "number", "own unit", "Mean of a head."),
)

VARIABLES: Mapping[str, tuple[Variable, ...]] = {
    "read": READ,
    "screen": SCREEN,
    "fit": FIT,
    "pair": PAIR,
    "population": POPULATION,
}
FILES = {
    "read": "responses.nc",
    "screen": "screening.nc",
    "fit": "fits.nc",
    "pair": "modes.nc",
    "population": "population.nc",
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
    known = {variable.name: variable for variable in (*VARIABLES[stage], *LABELS)}
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
        meaning = each.meaning + (" Optional." if each.optional else "")
        dims = ", ".join(each.dims) or "none"
        words = _KINDS[each.kind][0]
        rows.append(f"| `{each.name}` | {dims} | {words} | {each.unit} | {meaning} |")
    return "\n".join(rows) + "\n"
