"""Stage fit: one modal model per response, with the covariance of its parameters."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.batch import Progress, run_batch
from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray
from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_least_squares import (
    ModalFit,
    empty_fit,
    refine_modal_model,
    refusal,
    usable_points,
)
from identkit.methods.modal_model import ModalParameters, parameter_names
from identkit.methods.modal_problem import ModelShape
from identkit.outcomes import Outcome

SIGNIFICANCE_LIMIT = 5.0
KEPT_ATTRIBUTES = ("input_unit", "output_unit", "sample_period", "variance_source", "hold")


@dataclass(frozen=True)
class FitOptions:
    """The model asked for, the same for all responses."""

    base: str
    modes: str | int
    delay: bool
    residues: str


@dataclass(frozen=True)
class FitTask:
    """One response on its way to a worker."""

    frequency: FloatArray
    response: ComplexArray
    variance: FloatArray | None
    options: FitOptions
    start: ModalParameters | None = None


def fit_modes(
    responses: Gridded,
    screening: Gridded | None = None,
    *,
    base: str = "pivot",
    modes: str | int = "auto",
    delay: bool = True,
    residues: str = "real",
    jobs: int = 1,
    progress: Progress | None = None,
) -> xr.Dataset:
    """Fit a modal model to every response, each on its own, by maximum likelihood.

    Parameters
    ----------
    responses
        Dims response, output, input, frequency [Hz]; `frequency_response` [output/input],
        `frequency_response_variance` (optional), `usable_mask` (optional). On one grid or several.
    screening
        `usable_mask` of the screen stage, on the same grids; marks points, drops no response.
    base, modes, delay, residues
        As [model] of the study file; see `methods.modal_fit.fit_modal_model`.
    jobs
        Number of processes; results do not depend on it.
    progress
        Called with (done, total) responses.

    Returns
    -------
    xr.Dataset
        Dims response, mode, output, input, parameter, parameter_other: `modal_frequency` [Hz]
        ascending, `damping_ratio`, `residue`, `residue_rate`, the base, `feedthrough`, `delay` [s],
        `parameter_covariance`, `noise_ratio`, `mode_significance`, `fit_outcome`, `mode_outcome`,
        `usable_points`. NaN beyond a response's own number of modes.

    Outcomes
    --------
    Per response: DONE, NO_MODES, MODE_LIMIT, NOT_CONVERGED, SINGULAR_COVARIANCE, TOO_FEW_POINTS,
    NOT_FINITE. Per mode: DONE, MODE_OUT_OF_BAND, MODE_BELOW_SIGNIFICANCE, NOT_FITTED (none there).

    Raises
    ------
    InputError
        If an option is unknown or the plant is not scalar.
    """
    options = FitOptions(base, modes, delay, residues)
    tasks = _tasks(responses, screening, options, None)
    fits = run_batch(fit_task, tasks, jobs=jobs, progress=progress)
    return _as_dataset(responses, tasks, fits, options)


def refit_modes(
    responses: Gridded,
    starts: Mapping[str, ModalParameters],
    screening: Gridded | None = None,
    *,
    delay: bool = True,
    residues: str = "real",
    jobs: int = 1,
    progress: Progress | None = None,
) -> xr.Dataset:
    """Refine every response from a given start, number of modes unchanged.

    Parameters
    ----------
    responses, screening, delay, jobs, progress
        As in `fit_modes`.
    starts
        Start per response id; all with the same base. Responses without one end as NOT_FITTED.
    residues
        "real", "general", or "auto": general where the start has residue rates.

    Returns
    -------
    xr.Dataset
        As `fit_modes`, with `start_mode` (response, mode): which mode of the start each came from.
    """
    bases = {start.base for start in starts.values()}
    if len(bases) != 1:
        found = ", ".join(sorted(bases)) or "no start"
        raise InputError(Problem("starts", found, "starts that share one base"))
    options = FitOptions(bases.pop(), "auto", delay, residues)
    tasks = _tasks(responses, screening, options, starts)
    fits = run_batch(refit_task, tasks, jobs=jobs, progress=progress)
    return _as_dataset(responses, tasks, fits, options)


def fit_task(task: FitTask) -> ModalFit:
    """Fit one response; numerical failure becomes an outcome."""
    options = task.options
    try:
        return fit_modal_model(
            task.frequency,
            task.response,
            task.variance,
            base=options.base,
            modes=options.modes,
            delay=options.delay,
            residues=options.residues,
        )
    except (np.linalg.LinAlgError, FloatingPointError):
        return _failed(task, Outcome.NOT_CONVERGED)


def refit_task(task: FitTask) -> ModalFit:
    """Refine one response; numerical failure becomes an outcome."""
    if task.start is None:
        return _failed(task, Outcome.NOT_FITTED)
    general = {"real": False, "general": True, "auto": None}[task.options.residues]
    try:
        return refine_modal_model(
            task.frequency,
            task.response,
            task.variance,
            task.start,
            delay=task.options.delay,
            general=general,
        )
    except (np.linalg.LinAlgError, FloatingPointError):
        return _failed(task, Outcome.NOT_CONVERGED)


def _failed(task: FitTask, outcome: Outcome) -> ModalFit:
    use = usable_points(task.frequency, task.response, task.variance, task.options.base)
    shape = ModelShape(task.options.base, 0)
    reason = refusal(use, task.response, shape) or outcome
    return empty_fit(shape, reason, int(use.sum()), task.variance is None)


def _tasks(
    responses: Gridded,
    screening: Gridded | None,
    options: FitOptions,
    starts: Mapping[str, ModalParameters] | None,
) -> list[FitTask]:
    parts = datasets(responses)
    marks = [None] * len(parts) if screening is None else datasets(screening)
    if len(marks) != len(parts):
        found, expected = f"{len(marks)} grids", f"the {len(parts)} grids of the responses"
        raise InputError(Problem("screening", found, expected))
    tasks = []
    for part, mark in zip(parts, marks, strict=True):
        _check_scalar(part)
        mask = _mask(part, mark)
        frequency = np.asarray(part["frequency"].values, dtype=float)
        values = _channel(part, "frequency_response").astype(complex)
        variance = (
            _channel(part, "frequency_response_variance").astype(float)
            if "frequency_response_variance" in part
            else None
        )
        for k, name in enumerate(part["response"].values):
            response = np.where(mask[k], values[k], complex(np.nan, np.nan))
            known = variance is not None and bool(np.isfinite(variance[k]).any())
            tasks.append(
                FitTask(
                    frequency,
                    response,
                    variance[k] if variance is not None and known else None,
                    options,
                    None if starts is None else starts.get(str(name)),
                )
            )
    return tasks


def _check_scalar(part: xr.Dataset) -> None:
    for dim in ("output", "input"):
        if part.sizes[dim] != 1:
            found = f"{part.sizes[dim]} {dim}s"
            raise InputError(Problem("responses", found, f"one {dim}: scalar plants"))


def _channel(part: xr.Dataset, name: str) -> np.ndarray:
    order = ("response", "output", "input", "frequency")
    return np.asarray(part[name].transpose(*order).values[:, 0, 0, :])


def _mask(part: xr.Dataset, mark: xr.Dataset | None) -> BoolArray:
    mask: BoolArray = np.isfinite(_channel(part, "frequency_response"))
    if "usable_mask" in part:
        mask &= _channel(part, "usable_mask").astype(bool)
    if mark is None:
        return mask
    try:
        aligned = mark[["usable_mask"]].sel(response=part["response"].values)
    except KeyError as error:
        raise InputError(
            Problem("screening", f"no marks for {error}", "marks for every response")
        ) from error
    return np.asarray(mask & _channel(aligned, "usable_mask").astype(bool), dtype=np.bool_)


def _as_dataset(
    responses: Gridded, tasks: list[FitTask], fits: list[ModalFit], options: FitOptions
) -> xr.Dataset:
    parts = datasets(responses)
    general = options.residues != "real"
    most = max((fit.parameters.modal_frequency.size for fit in fits), default=0)
    names = parameter_names(options.base, most, general=general)
    labels = xr.concat([_labels(part) for part in parts], "response", join="outer")
    data = labels.assign_coords(
        output=parts[0]["output"],
        input=parts[0]["input"],
        mode=np.arange(1, most + 1),
        parameter=list(names),
        parameter_other=list(names),
    )
    data = data.assign(_mode_variables(fits, most, tasks))
    data = data.assign(_scalar_variables(fits, options.base))
    covariance = np.stack([_padded_covariance(fit, names) for fit in fits])
    data["parameter_covariance"] = (("response", "parameter", "parameter_other"), covariance)
    data.attrs = _attributes(parts[0], fits, options)
    return data


def _labels(part: xr.Dataset) -> xr.Dataset:
    along = {name: value for name, value in part.coords.items() if value.dims == ("response",)}
    return xr.Dataset(coords=along)


def _mode_variables(
    fits: list[ModalFit], most: int, tasks: list[FitTask]
) -> dict[str, tuple[tuple[str, ...], np.ndarray]]:
    def table(values: list[np.ndarray]) -> FloatArray:
        out = np.full((len(fits), most), np.nan)
        for row, value in zip(out, values, strict=True):
            row[: value.size] = value
        return out

    plants = [fit.parameters for fit in fits]
    modal, matrix = ("response", "mode"), ("response", "mode", "output", "input")
    outcome = np.full((len(fits), most), int(Outcome.NOT_FITTED), dtype=np.int8)
    origin = np.full((len(fits), most), -1, dtype=np.int64)
    for k, fit in enumerate(fits):
        size = fit.significance.size
        outcome[k, :size] = mode_outcomes(fit, tasks[k])
        origin[k, :size] = fit.start_mode
    return {
        "modal_frequency": (modal, table([plant.modal_frequency for plant in plants])),
        "damping_ratio": (modal, table([plant.damping_ratio for plant in plants])),
        "residue": (matrix, table([plant.residue for plant in plants])[:, :, None, None]),
        "residue_rate": (matrix, table([plant.residue_rate for plant in plants])[:, :, None, None]),
        "mode_significance": (modal, table([fit.significance for fit in fits])),
        "mode_outcome": (modal, outcome),
        "start_mode": (modal, origin),
    }


def mode_outcomes(fit: ModalFit, task: FitTask) -> np.ndarray:
    """Return (modes,) codes: outside the band, below significance 5, or done."""
    use = usable_points(task.frequency, task.response, task.variance, task.options.base)
    band = task.frequency[use]
    frequency = fit.parameters.modal_frequency
    codes = np.full(frequency.size, int(Outcome.DONE), dtype=np.int8)
    codes[fit.significance < SIGNIFICANCE_LIMIT] = int(Outcome.MODE_BELOW_SIGNIFICANCE)
    if band.size:
        outside = (frequency < band[0]) | (frequency > band[-1])
        codes[outside] = int(Outcome.MODE_OUT_OF_BAND)
    return codes


def _scalar_variables(
    fits: list[ModalFit], base: str
) -> dict[str, tuple[tuple[str, ...], np.ndarray]]:
    def column(name: str) -> FloatArray:
        return np.array([getattr(fit.parameters, name) for fit in fits], dtype=float)

    matrix = ("response", "output", "input")
    out: dict[str, tuple[tuple[str, ...], np.ndarray]] = {
        "feedthrough": (matrix, column("feedthrough")[:, None, None]),
        "delay": (("response",), column("delay")),
        "noise_ratio": (("response",), np.array([fit.noise_ratio for fit in fits])),
        "fit_outcome": (("response",), np.array([fit.outcome for fit in fits], dtype=np.int8)),
        "usable_points": (("response",), np.array([fit.points for fit in fits], dtype=np.int64)),
    }
    if base == "free":
        out["base_gain"] = (matrix, column("base_gain")[:, None, None])
    if base == "pivot":
        out["base_frequency"] = (("response",), column("base_frequency"))
        out["base_damping_ratio"] = (("response",), column("base_damping_ratio"))
        out["base_residue"] = (matrix, column("base_residue")[:, None, None])
    return out


def _padded_covariance(fit: ModalFit, names: tuple[str, ...]) -> FloatArray:
    """Put a fit's covariance in the dataset's layout; rates that were held have none."""
    out = np.full((len(names), len(names)), np.nan)
    place = {name: k for k, name in enumerate(names)}
    rows = np.array([place[name] for name in fit.parameter_names])
    held = [
        place[f"residue_rate_{k + 1}"]
        for k in range(fit.significance.size)
        if f"residue_rate_{k + 1}" in place and f"residue_rate_{k + 1}" not in fit.parameter_names
    ]
    every = np.concatenate([rows, np.array(held, dtype=rows.dtype)])
    out[np.ix_(every, every)] = 0.0
    out[np.ix_(rows, rows)] = fit.covariance
    return out


def _attributes(part: xr.Dataset, fits: list[ModalFit], options: FitOptions) -> dict[str, object]:
    kept = {name: part.attrs[name] for name in KEPT_ATTRIBUTES if name in part.attrs}
    if any(fit.variance_estimated for fit in fits):
        kept["variance_source"] = "residuals"
    return (
        {"sample_period": 0.0, "variance_source": "measured"}
        | kept
        | {
            "base": options.base,
            "residues": options.residues,
        }
    )
