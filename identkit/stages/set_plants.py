"""Fitted plants, as the set file carries them, out of a dataset of fits or of paired modes."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.methods.modal_model import parameter_names
from identkit.outcomes import ADVICE, Outcome
from identkit.plant_set.fields import Covariance, FittedPlant, FloatArray, IntArray
from identkit.plants import lacks_plant

_PER_MODE = ("response", "mode")
_PER_MODE_CHANNEL = ("response", "mode", "output", "input")
_PER_CHANNEL = ("response", "output", "input")
_DIMS = {
    "residue": _PER_MODE_CHANNEL,
    "residue_rate": _PER_MODE_CHANNEL,
    "base_gain": _PER_CHANNEL,
    "base_residue": _PER_CHANNEL,
    "feedthrough": _PER_CHANNEL,
    "modal_frequency": _PER_MODE,
    "damping_ratio": _PER_MODE,
    "mode_position": _PER_MODE,
    "parameter_covariance": ("response", "parameter", "parameter_other"),
}
_PER_RESPONSE = ("delay", "base_frequency", "base_damping_ratio", "fit_outcome", "response")


def set_plants(modes: xr.Dataset) -> tuple[list[FittedPlant], dict[str, str]]:
    """Return the plants of a dataset of fits or paired modes, and why others have none.

    Parameters
    ----------
    modes
        Dims response, mode, output, input; all modes of a response count, paired or not.

    Returns
    -------
    tuple
        Plants in the order of `response`, their modes in the order of the fit (that of the
        covariance), and a reason for every response without a usable fit.
    """
    columns = _columns(modes)
    lacking = np.zeros(modes.sizes["response"], dtype=bool)
    if "fit_outcome" in modes:
        lacking = lacks_plant(modes)
    plants, missing = [], {}
    for index, labels in enumerate(labels_of(modes)):
        reason = _unusable(columns, index, bool(lacking[index]))
        if reason:
            missing[str(modes["response"].values[index])] = reason
        else:
            plants.append(_plant(columns, index, labels, str(modes.attrs["base"])))
    return plants, missing


def labels_of(part: xr.Dataset) -> list[dict[str, str | float]]:
    """Return the labels of every response; a missing one (empty text, NaN) is absent."""
    names = [
        str(name)
        for name, column in part.coords.items()
        if column.dims == ("response",) and name != "response"
    ]
    columns = {name: part[name].values.tolist() for name in names}
    return [
        {name: column[index] for name, column in columns.items() if _is_there(column[index])}
        for index in range(part.sizes["response"])
    ]


def label_columns(rows: Sequence[dict[str, str | float]]) -> dict[str, NDArray[Any]]:
    """Return labels of many responses as columns: numbers with NaN, or texts with empty ones."""
    names = dict.fromkeys(name for row in rows for name in row)
    columns: dict[str, NDArray[Any]] = {}
    for name in names:
        values = [row.get(name) for row in rows]
        if any(isinstance(value, str) for value in values):
            columns[name] = np.array(["" if value is None else str(value) for value in values])
        else:
            columns[name] = np.array([np.nan if v is None else v for v in values], dtype=float)
    return columns


def _is_there(value: Any) -> bool:
    return value is not None and value == value and value != ""


def _columns(modes: xr.Dataset) -> dict[str, Any]:
    """Return plain arrays, channels last; absent variables as None."""
    names = (*_DIMS, *_PER_RESPONSE)
    columns: dict[str, Any] = dict.fromkeys(names)
    for name in names:
        if name in modes:
            columns[name] = modes[name].transpose(*_DIMS.get(name, ("response",))).values
    return columns


def _unusable(columns: dict[str, Any], index: int, lacking: bool) -> str:
    code = Outcome.DONE if columns["fit_outcome"] is None else int(columns["fit_outcome"][index])
    values = [
        columns[name][index]
        for name in ("delay", "base_frequency", "base_gain", "base_residue", "feedthrough")
        if columns[name] is not None
    ]
    if not lacking and all(np.isfinite(value).all() for value in values):
        return ""
    happened = ADVICE[Outcome(code)].happened if code != Outcome.DONE else "no finite fit"
    return f"not fitted: {happened}"


def _plant(
    columns: dict[str, Any], index: int, labels: dict[str, str | float], base: str
) -> FittedPlant:
    order = _fit_order(columns, index)
    residue = columns["residue"][index][order]
    rate = columns["residue_rate"]
    shape = columns["feedthrough"][index].shape
    return FittedPlant(
        response=str(columns["response"][index]),
        modal_frequency=columns["modal_frequency"][index][order],
        damping_ratio=columns["damping_ratio"][index][order],
        residue=residue,
        residue_rate=np.zeros_like(residue) if rate is None else np.nan_to_num(rate[index][order]),
        base=base,
        base_gain=_matrix(columns["base_gain"], index, shape, base == "free"),
        base_frequency=_number(columns["base_frequency"], index, base == "pivot"),
        base_damping_ratio=_number(columns["base_damping_ratio"], index, base == "pivot"),
        base_residue=_matrix(columns["base_residue"], index, shape, base == "pivot"),
        feedthrough=columns["feedthrough"][index],
        delay=float(columns["delay"][index]),
        labels=labels,
        covariance=_covariance(columns, index, order.size, base),
    )


def _fit_order(columns: dict[str, Any], index: int) -> IntArray:
    """Return which columns hold modes of this response, in the order of its own fit."""
    frequency = columns["modal_frequency"][index]
    there = np.flatnonzero(np.isfinite(frequency))
    position = columns["mode_position"]
    key = frequency[there] if position is None else position[index][there]
    return np.asarray(there[np.argsort(key, kind="stable")], dtype=np.int64)


def _matrix(column: Any, index: int, shape: tuple[int, ...], wanted: bool) -> FloatArray:
    return np.asarray(column[index]) if wanted else np.zeros(shape)


def _number(column: Any, index: int, wanted: bool) -> float:
    return float(column[index]) if wanted else 0.0


def _covariance(columns: dict[str, Any], index: int, modes: int, base: str) -> Covariance | None:
    """Return the covariance, or None where it is not known (singular) or has other parameters."""
    whole = columns["parameter_covariance"]
    if whole is None:
        return None
    matrix = whole[index]
    known = np.isfinite(np.diag(matrix))
    block = matrix[np.ix_(known, known)]
    for general in (False, True):
        names = parameter_names(base, modes, general=general)
        if known.sum() == len(names) and np.isfinite(block).all():
            return Covariance(names, block)
    return None
