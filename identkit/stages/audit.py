"""Stage audit: whether the set holds the measured plants, and whether its own claims stand.

Only the set file and the measurements are used; nothing is shared with the code that built the set
(`plant_set.reach`, `plant_set.claims`).
"""

import json
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets
from identkit.plant_set.claims import ROUNDING, check_claims
from identkit.plant_set.fields import (
    AuditVerdict,
    BoolArray,
    ComplexArray,
    FittedPlant,
    FloatArray,
    PlantSetFields,
)
from identkit.plant_set.raw_points import (
    CANNOT_TELL,
    FALSE_ALARM,
    HELD,
    NO_POINTS,
    NOT_HELD,
    RawReach,
    judge_points,
    neighbour_variance,
)
from identkit.plant_set.reach import reach_of_plants
from identkit.plant_set.stacked import plants_at
from identkit.stages.set_plants import label_columns, labels_of, set_plants

NO_FIT, NOT_JUDGED = "no fit", "not judged"
RESPONSES_AT_ONCE = 256
NEAR_MODE = 0.1
_SMOOTHING = 21
_POINT = ("response", "output", "input", "frequency")

COLUMNS = {
    "verdict": "verdict",
    "fit_verdict": "fit_verdict",
    "fit_reach": "fit_reach",
    "fit_reach_frequency": "fit_reach_frequency_hz",
    "nearest_mode": "nearest_mode",
    "raw_verdict": "raw_verdict",
    "raw_reach": "raw_reach",
    "raw_reach_frequency": "raw_reach_frequency_hz",
    "raw_reach_with_allowance": "raw_reach_with_allowance",
    "raw_reach_with_allowance_frequency": "raw_reach_with_allowance_frequency_hz",
    "points_used": "points_used",
    "points_left_out": "points_left_out",
    "points_outside_band": "points_outside_band",
    "excluded": "excluded",
    "reason": "reason",
}


def audit(
    plant_set: PlantSetFields,
    modes: xr.Dataset | None = None,
    responses: Gridded | None = None,
    screening: Gridded | None = None,
    *,
    false_alarm: float = FALSE_ALARM,
) -> xr.Dataset:
    """Judge fitted plants and measured points against a set, and the set against itself.

    A fitted plant is held if its reach over the band is at most 1 (within the tolerance the set
    states between grid points). Measured points are judged with an allowance for their noise, see
    `plant_set.raw_points`. Where the variance of the points is not known, the relative residuals
    of the fit around each point stand in; without a fit either, how far each point lies off its
    neighbours.

    Parameters
    ----------
    plant_set
        The set, from its file.
    modes
        Fits or paired modes; a response without a usable fit is judged by its points.
    responses, screening
        Measured responses and the points that screening lets through.
    false_alarm
        Chance that noise alone pushes a response beyond its allowance.

    Returns
    -------
    Dataset
        Along `response`, labels kept: ``verdict`` ("held", "not held", "cannot tell", "not
        judged"), ``fit_verdict`` (also "no fit"), ``fit_reach``, ``fit_reach_frequency`` (Hz),
        ``nearest_mode`` (within 10 % of that frequency, else empty), ``raw_verdict``,
        ``raw_reach``, ``raw_reach_frequency``, ``raw_reach_with_allowance``,
        ``raw_reach_with_allowance_frequency``, ``points_used``, ``points_left_out``,
        ``points_outside_band``, ``excluded``, ``reason``. Attribute ``failed_checks``: JSON list
        of sentences, the claims of the set that its own numbers do not bear out.

    Raises
    ------
    InputError
        If there is nothing to judge, or its channels are not those of the set.
    """
    if modes is None and responses is None:
        raise InputError(Problem("audit", "neither fits nor responses", "something to judge"))
    plants, unfitted = ([], {}) if modes is None else set_plants(modes)
    names, labels = _responses(modes, responses)
    columns = _blank(len(names))
    place = {name: index for index, name in enumerate(names)}
    by_name = {plant.response: plant for plant in plants}
    _judge_fits(columns, place, plant_set, plants, modes)
    if responses is not None:
        for part, judged in _judged(plant_set, responses, screening, by_name, false_alarm):
            _fill_raw(columns, [place[name] for name in part], judged)
    excluded = {item.label: item.reason for item in plant_set.certificate.measured.excluded}
    for name, index in place.items():
        columns["excluded"][index] = name in excluded
        columns["reason"][index] = excluded.get(name, unfitted.get(name, ""))
        columns["verdict"][index] = _overall(
            columns["fit_verdict"][index], columns["raw_verdict"][index]
        )
    failed = [str(check) for check in check_claims(plant_set)]
    return xr.Dataset(
        {name: ("response", _typed(values)) for name, values in columns.items()},
        coords={"response": names, **{k: ("response", v) for k, v in labels.items()}},
        attrs={"failed_checks": json.dumps(failed), "false_alarm": false_alarm},
    )


def audit_responses(
    plant_set: PlantSetFields, responses: Gridded, fits: xr.Dataset | None = None
) -> xr.Dataset:
    """Judge new responses, and their fits where there are any; see `audit`."""
    return audit(plant_set, fits, responses)


def failed_sentences(table: xr.Dataset) -> list[str]:
    """Return one sentence per failed claim and per response that is not held or excluded."""
    sentences: list[str] = list(json.loads(table.attrs["failed_checks"]))
    bad = (table["verdict"].values == NOT_HELD) & ~table["excluded"].values
    for index in np.flatnonzero(bad):
        row = table.isel(response=int(index))
        by_fit = str(row["fit_verdict"].values) == NOT_HELD
        start = "fit_reach" if by_fit else "raw_reach_with_allowance"
        source = "its fit" if by_fit else "its measured points, noise allowed for,"
        reach, hertz = float(row[start]), float(row[f"{start}_frequency"])
        name = str(row["response"].values)
        sentences.append(f"{name} is not held: {source} reaches {reach:.4g} at {hertz:.6g} Hz")
    return sentences


def run_verdict(table: xr.Dataset, *, forced: bool = False) -> AuditVerdict:
    """Return the verdict of a study: fits decide, points only where they are clearly not held."""
    failed = failed_sentences(table)
    return AuditVerdict(not failed, tuple(failed), forced and bool(failed))


def all_held(table: xr.Dataset) -> bool:
    """Tell whether `identkit audit` may say yes: every response held, every claim borne out.

    "cannot tell" and "not judged" are no yes. Responses the set itself names as excluded do not
    count.
    """
    counted = ~table["excluded"].values
    every = bool(np.all(table["verdict"].values[counted] == HELD))
    return every and not json.loads(table.attrs["failed_checks"])


def audit_table(table: xr.Dataset) -> pd.DataFrame:
    """Return the rows of ``audit.csv``: response, labels, then the columns named in `COLUMNS`."""
    frame = table.to_dataframe().reset_index()
    labels = [str(name) for name in table.coords if name != "response"]
    return frame[["response", *labels, *COLUMNS]].rename(columns=COLUMNS)


def _responses(
    modes: xr.Dataset | None, responses: Gridded | None
) -> tuple[list[str], dict[str, Any]]:
    """Return the names of all responses, those measured first, and their labels as columns."""
    parts = ([] if responses is None else datasets(responses)) + ([] if modes is None else [modes])
    found: dict[str, dict[str, str | float]] = {}
    for part in parts:
        for name, labels in zip(part["response"].values, labels_of(part), strict=True):
            found.setdefault(str(name), labels)
    return list(found), label_columns(list(found.values()))


def _blank(count: int) -> dict[str, list[Any]]:
    numbers = [name for name in COLUMNS if "reach" in name]
    columns: dict[str, list[Any]] = {name: [float("nan")] * count for name in numbers}
    columns |= {name: [0] * count for name in COLUMNS if name.startswith("points")}
    columns |= {"nearest_mode": [""] * count, "reason": [""] * count, "verdict": [""] * count}
    columns["excluded"] = [False] * count
    columns["fit_verdict"] = [NO_FIT] * count
    columns["raw_verdict"] = [NO_POINTS] * count
    return {name: columns[name] for name in COLUMNS}


def _judge_fits(
    columns: dict[str, list[Any]],
    place: Mapping[str, int],
    plant_set: PlantSetFields,
    plants: list[FittedPlant],
    modes: xr.Dataset | None,
) -> None:
    reach = reach_of_plants(plant_set, plants)
    limit = 1.0 + ROUNDING + plant_set.certificate.between_grid.tolerance
    near = {} if modes is None else nearest_modes(modes, plants, reach.frequency)
    for plant, value, hertz in zip(plants, reach.value, reach.frequency, strict=True):
        index = place[plant.response]
        columns["fit_reach"][index] = float(value)
        columns["fit_reach_frequency"][index] = float(hertz)
        columns["fit_verdict"][index] = HELD if value <= limit else NOT_HELD
        columns["nearest_mode"][index] = near.get(plant.response, "")


def nearest_modes(
    modes: xr.Dataset, plants: list[FittedPlant], frequency: FloatArray
) -> dict[str, str]:
    """Return by response the name of its mode nearest a frequency, where one is within 10 %.

    Parameters
    ----------
    modes
        Fits or paired modes.
    plants
        Plants out of them.
    frequency
        (plants,) Hz.
    """
    count = modes.sizes["mode"]
    names = modes["mode"].values.astype(str) if "mode" in modes.coords else None
    columns = modes["modal_frequency"].transpose("response", "mode").values
    rows = {str(name): row for row, name in enumerate(modes["response"].values)}
    found = {}
    for plant, hertz in zip(plants, frequency, strict=True):
        distance = np.abs(np.log(columns[rows[plant.response]] / hertz))
        best = int(np.nanargmin(distance)) if np.isfinite(distance).any() else count
        if best < count and distance[best] <= NEAR_MODE:
            found[plant.response] = f"mode {best + 1}" if names is None else str(names[best])
    return found


def _judged(
    plant_set: PlantSetFields,
    responses: Gridded,
    screening: Gridded | None,
    by_name: Mapping[str, FittedPlant],
    false_alarm: float,
) -> Iterator[tuple[list[str], RawReach]]:
    """Judge the points of all responses, some at a time."""
    masks: list[xr.Dataset | None] = [None] * len(datasets(responses))
    if screening is not None:
        masks = list(datasets(screening))
    for part, mask in zip(datasets(responses), masks, strict=True):
        for start in range(0, part.sizes["response"], RESPONSES_AT_ONCE):
            some = slice(start, start + RESPONSES_AT_ONCE)
            chosen = part.isel(response=some)
            usable = _usable(chosen, None if mask is None else mask.isel(response=some))
            measured = _channel(chosen["frequency_response"], plant_set)
            frequency = chosen["frequency"].values
            names = [str(name) for name in chosen["response"].values]
            variance = _variance(
                chosen, plant_set, measured, usable, [by_name.get(n) for n in names]
            )
            yield (
                names,
                judge_points(
                    plant_set, frequency, measured, variance, usable, false_alarm=false_alarm
                ),
            )


def _channel(values: xr.DataArray, plant_set: PlantSetFields) -> Any:
    """Return (responses, points) of the one channel."""
    array = values.transpose(*_POINT).values
    if array.shape[1:3] != (len(plant_set.outputs), len(plant_set.inputs)):
        expected = f"{len(plant_set.outputs)} outputs and {len(plant_set.inputs)} inputs"
        found = f"{array.shape[1]} outputs and {array.shape[2]} inputs"
        raise InputError(Problem("responses", found, expected))
    return array[:, 0, 0]


def _usable(part: xr.Dataset, mask: xr.Dataset | None) -> BoolArray | None:
    source = part if mask is None else mask
    if "usable_mask" not in source:
        return None
    return np.asarray(source["usable_mask"].transpose(*_POINT).values[:, 0, 0], dtype=bool)


def _variance(
    part: xr.Dataset,
    plant_set: PlantSetFields,
    measured: ComplexArray,
    usable: BoolArray | None,
    plants: list[FittedPlant | None],
) -> FloatArray:
    """Return the stated variance of the points, or one read off residuals or neighbours."""
    frequency = part["frequency"].values
    result = np.full(measured.shape, np.nan)
    if "frequency_response_variance" in part:
        stated = _channel(part["frequency_response_variance"], plant_set)
        result = np.array(stated, dtype=float)
    for index in np.flatnonzero(~np.isfinite(result).any(axis=1)).tolist():
        plant = plants[index]
        good = None if usable is None else usable[index]
        if plant is None:
            result[index] = neighbour_variance(frequency, measured[index], good)
            continue
        fitted = plants_at([plant], frequency, plant_set.time.period)[0, :, 0, 0]
        square = np.abs(measured[index] / fitted - 1.0) ** 2
        known = np.isfinite(square) if good is None else np.isfinite(square) & good
        result[index] = _moving_mean(square, known) * np.abs(fitted) ** 2
    return result


def _moving_mean(values: FloatArray, good: BoolArray) -> FloatArray:
    """Return the mean of the good values within ten points of each; NaN where there is none."""
    window = np.ones(_SMOOTHING)
    total = np.convolve(np.where(good, values, 0.0), window)[_SMOOTHING // 2 :][: values.size]
    count = np.convolve(good.astype(float), window)[_SMOOTHING // 2 :][: values.size]
    return np.asarray(np.where(count > 0.5, total / np.maximum(count, 1.0), np.nan))


def _fill_raw(columns: dict[str, list[Any]], rows: list[int], judged: RawReach) -> None:
    fields = {
        "raw_verdict": judged.verdict,
        "raw_reach": judged.reach.tolist(),
        "raw_reach_frequency": judged.frequency.tolist(),
        "raw_reach_with_allowance": judged.reach_with_allowance.tolist(),
        "raw_reach_with_allowance_frequency": judged.frequency_with_allowance.tolist(),
        "points_used": judged.used.tolist(),
        "points_left_out": judged.left_out.tolist(),
        "points_outside_band": judged.outside_band.tolist(),
    }
    for name, values in fields.items():
        for row, value in zip(rows, values, strict=True):
            columns[name][row] = value


def _overall(by_fit: str, by_points: str) -> str:
    """Return the verdict on a response: the fit decides unless its points are clearly out."""
    if NOT_HELD in (by_fit, by_points):
        return NOT_HELD
    if by_fit == HELD:
        return HELD
    return {HELD: HELD, CANNOT_TELL: CANNOT_TELL}.get(by_points, NOT_JUDGED)


def _typed(values: list[Any]) -> Any:
    return np.array(values, dtype=str) if isinstance(values[0], str) else np.array(values)
