"""Planning a measurement: how long and how hard to excite, from a first response."""

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from identkit.atomic import write_text
from identkit.errors import MissingStageError
from identkit.grids import datasets, load
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.measurement_planning import line_spacing, needed_gain, relative_deviation
from identkit.methods.modal_model import modal_response, parameter_names
from identkit.methods.schroeder_multisine import crest_factor, multisine, schroeder_phases
from identkit.outcomes import Outcome
from identkit.plants import plant_parameters
from identkit.settings import Settings, load_settings

FILE = "multisine.txt"
_LINES = 1000
_HALF_TRACK = 0.5
_MOST_SAMPLES = 1 << 20
CAUTIONS = (
    "Exciting an actuator can damage it and hurt people: start small, keep within its drive, "
    "travel and temperature limits, guard moving parts and have a way to stop. These figures are "
    "an estimate, no safety certificate; local codes and licensed judgement come first."
)


@dataclass(frozen=True)
class ExcitationPlan:
    """What a measurement has to be to reach wanted errors.

    Attributes
    ----------
    gain
        Factor on the information of the first measurement.
    amplitude
        Largest factor on its amplitude that the stated limits allow; NaN where none is stated.
    seconds
        Length of its records; NaN without records.
    sentences
        The plan in words, cautions last.
    file
        The multisine.
    """

    gain: float
    amplitude: float
    seconds: float
    sentences: tuple[str, ...]
    file: Path


def plan_excitation(
    study: Path | str, *, frequency: float = 1e-4, damping: float = 0.02, radius: float = 0.02
) -> ExcitationPlan:
    """Plan a measurement from the first results of a study.

    Parameters
    ----------
    study
        The study file; its results must reach the pairing of modes.
    frequency, damping, radius
        Relative standard errors wanted for modal frequencies, damping ratios, and the response
        (what a relative radius is uncertain by).

    Returns
    -------
    ExcitationPlan
        The multisine is written beside the other results.

    Raises
    ------
    MissingStageError
        If the study has not been run far enough.
    InputError
        If the study file is wrong.
    """
    settings = load_settings(study)
    folder = settings.folder / settings.study.results
    for name in ("responses.nc", "fits.nc", "modes.nc"):
        if not (folder / name).exists():
            raise MissingStageError("pair", "plan")
    responses = datasets(load(folder / "responses.nc"))
    fits, modes = _dataset(folder / "fits.nc"), _dataset(folder / "modes.nc")
    errors = _mode_errors(modes)
    spread, lines = _radius_error(responses, fits)
    gains = {
        "modal frequencies": needed_gain(errors[0], frequency),
        "damping ratios": needed_gain(errors[1], damping),
        "the response": needed_gain(np.array([spread]), radius),
    }
    gain = max(value for value in gains.values() if np.isfinite(value))
    amplitude, limit = _amplitude_left(responses, settings)
    seconds = _seconds(responses)
    words, file = _write_multisine(folder / FILE, settings, fits, modes, lines)
    sentences = (
        *_error_sentences(modes, errors, spread),
        _gain_sentence(gains, gain, (frequency, damping, radius)),
        *_length_sentences(gain, amplitude, limit, seconds),
        words,
        CAUTIONS,
    )
    return ExcitationPlan(gain, amplitude, seconds, sentences, file)


def _dataset(path: Path) -> xr.Dataset:
    data = load(path)
    assert isinstance(data, xr.Dataset)
    return data


def _mode_errors(modes: xr.Dataset) -> FloatArray:
    """Return (2, modes) median relative standard errors of frequency and damping ratio."""
    named = modes.isel(mode=modes["mode_in_population"].values.astype(bool))
    relative = [
        named[f"{name}_standard_error"].values / named[name].values
        for name in ("modal_frequency", "damping_ratio")
    ]
    return np.array([[_median(column) for column in table.T] for table in relative])


def _median(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(np.median(known)) if known.size else np.nan


def _radius_error(responses: list[xr.Dataset], fits: xr.Dataset) -> tuple[float, FloatArray]:
    """Return the median over responses of the largest relative deviation, and the lines."""
    frequency = responses[0]["frequency"].values
    used = np.any([_used(part) for part in responses[:1]], axis=0)
    lines = frequency[used] if used.any() else frequency
    worst = []
    for k in np.flatnonzero(fits["fit_outcome"].values == Outcome.DONE):
        plant = plant_parameters(fits, int(k))
        general = str(fits.attrs["residues"]) != "real"
        names = parameter_names(plant.base, plant.modal_frequency.size, general=general)
        covariance = (
            fits["parameter_covariance"]
            .isel(response=int(k))
            .sel(parameter=list(names), parameter_other=list(names))
            .values
        )
        deviation = relative_deviation(lines, plant, covariance, general=general)
        worst.append(float(np.quantile(deviation, 0.95)))
    return float(np.median(worst)) if worst else np.nan, lines


def _used(part: xr.Dataset) -> np.ndarray:
    measured = np.isfinite(part["frequency_response"].values)
    if "usable_mask" in part:
        measured &= part["usable_mask"].values
    return np.asarray(measured.reshape(-1, measured.shape[-1]).any(axis=0))


def _amplitude_left(responses: list[xr.Dataset], settings: Settings) -> tuple[float, str]:
    """Return by how much the amplitude may grow, and what ends it."""
    records = settings.records
    if records is None or "drive_peak" not in responses[0]:
        return math.nan, ""
    half = records.linear_range or (_HALF_TRACK if records.in_phase is not None else None)
    found = []
    for name, peak, most in (
        ("the linear range of position", "position_peak", half),
        ("the drive limit", "drive_peak", records.drive_limit),
    ):
        reached = float(np.median(np.concatenate([part[peak].values for part in responses])))
        if most is not None and reached > 0.0:
            found.append((most / reached, name))
    return min(found) if found else (math.nan, "")


def _seconds(responses: list[xr.Dataset]) -> float:
    part = responses[0]
    if "record_samples" not in part:
        return math.nan
    return float(np.median(part["record_samples"].values)) * float(
        part.attrs["record_sample_period"]
    )


def _error_sentences(modes: xr.Dataset, errors: FloatArray, spread: float) -> list[str]:
    names = modes["mode"].values[modes["mode_in_population"].values.astype(bool)]
    rows = [
        f"{name}: frequency {error[0]:.2g}, damping ratio {error[1]:.2g}"
        for name, error in zip(names, errors.T, strict=True)
    ]
    return [
        "Relative standard errors of one response now (median over responses): " + "; ".join(rows),
        f"Its modelled response is known to {spread:.2g} at 95 % of the lines.",
    ]


def _gain_sentence(gains: dict[str, float], gain: float, wanted: tuple[float, float, float]) -> str:
    asked = ", ".join(
        f"{name} to {value:g} (x{gains[name]:.3g})"
        for name, value in zip(gains, wanted, strict=True)
    )
    if gain <= 1.0:
        return f"Wanted: {asked}. The present measurement is enough."
    return f"Wanted: {asked}. That takes {gain:.3g} times the information."


def _length_sentences(gain: float, amplitude: float, limit: str, seconds: float) -> list[str]:
    """Say how length and amplitude trade against each other."""
    length = (
        f"{gain * seconds:.3g} s of record"
        if np.isfinite(seconds)
        else f"{gain:.3g} times the averages"
    )
    said = [f"At the present amplitude: {length} for every response."]
    if not np.isfinite(amplitude):
        said.append(
            f"At the present length: {math.sqrt(gain):.3g} times the amplitude; no limit of drive "
            "or travel is stated, so whether the device bears it is for you to judge."
        )
        return said
    if amplitude < 1.0:
        said.append(f"The present amplitude exceeds {limit}: excite {amplitude:.2g} times as much.")
        return said
    grown = gain / amplitude**2
    end = f"{grown * seconds:.3g} s" if np.isfinite(seconds) else f"{grown:.3g} times the averages"
    said.append(f"Within {limit} the amplitude may grow {amplitude:.3g} times; then {end} will do.")
    return said


def _write_multisine(
    path: Path, settings: Settings, fits: xr.Dataset, modes: xr.Dataset, lines: FloatArray
) -> tuple[str, Path]:
    """Write one period of a multisine that moves the mean plant alike at every line."""
    plants = [
        plant_parameters(fits, int(k))
        for k in np.flatnonzero(fits["fit_outcome"].values == Outcome.DONE)[:20]
    ]
    records = settings.records
    period = records.sample_period if records else 1.0 / (4.0 * lines[-1])
    spacing = min(
        line_spacing(p.modal_frequency, p.damping_ratio) for p in plants if p.modal_frequency.size
    )
    samples = min(1 << math.ceil(math.log2(1.0 / (period * spacing))), _MOST_SAMPLES)
    if records and records.sectors:
        samples = records.sectors * math.ceil(1.0 / (period * spacing * records.sectors))
    step = 1.0 / (samples * period)
    wanted = np.geomspace(max(lines[0], step), min(lines[-1], 0.49 / period), _LINES) / step
    chosen = np.unique(np.round(wanted).astype(int))
    if records and records.sectors:
        chosen = chosen[chosen % (samples // records.sectors) != 0]
    chosen = chosen[(chosen > 0) & (2 * chosen < samples)]
    moves = _typical(np.array([modal_response(chosen * step, plant) for plant in plants]))
    phase = schroeder_phases(np.ones(chosen.size), chosen) - np.angle(moves)
    signal = multisine(chosen, 1.0 / np.abs(moves), samples, phase)
    signal = signal / np.sqrt(np.mean(signal**2))
    crest = crest_factor(signal)
    motion = crest_factor(multisine(chosen, np.ones(chosen.size), samples))
    head = (
        f"# one period of a multisine of root mean square 1; {chosen.size} lines from "
        f"{chosen[0] * step:.6g} to {chosen[-1] * step:.6g} Hz\n"
        f"# {samples} samples of {period:.12g} s; crest factor {crest:.4g}; shaped for even motion "
        f"of the plant without a loop, crest factor of that motion {motion:.4g}\n# {CAUTIONS}\n"
        "excitation\n"
    )
    write_text(path, head + "\n".join(f"{value:.9g}" for value in signal) + "\n")
    words = (
        f"A multisine of {chosen.size} lines, {samples} samples of {period:.6g} s, crest factor "
        f"{crest:.3g} ({motion:.3g} of the motion it is shaped for), is in {path}."
    )
    return words, path


def _typical(responses: ComplexArray) -> ComplexArray:
    """Return the median magnitude with the phase of the mean."""
    return np.asarray(
        np.median(np.abs(responses), axis=0) * np.exp(1j * np.angle(responses.mean(axis=0)))
    )
