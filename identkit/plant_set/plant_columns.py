"""Many plants as columns: what differs in length between plants stands end to end.

`mode_count` and `parameter_count` say how many entries of the flat columns belong to each plant.
Labels are columns `label_<name>` with `has_label_<name>`: a missing label is missing.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from identkit.errors import InputError, Problem

Columns = dict[str, NDArray[Any]]

_BY_MODE = ("modal_frequency", "damping_ratio", "residue", "residue_rate")
_MATRICES = ("base_gain", "base_residue", "feedthrough")
_NUMBERS = ("base_frequency", "base_damping_ratio")


def plants_to_columns(plants: list[dict[str, Any]]) -> Columns:
    """Return the columns of plants given as JSON values (`plant_document.plant_to`)."""
    modal = [plant["modal_parameters"] for plant in plants]
    columns: Columns = {
        "response": _texts([plant["response"] for plant in plants]),
        "delay": np.array([plant["delay"] for plant in plants], dtype=float),
        "reach": np.array([plant["reach"]["value"] for plant in plants], dtype=float),
        "reach_frequency": np.array([p["reach"]["frequency"] for p in plants], dtype=float),
        "base": _texts([item["base"] for item in modal]),
        "mode_count": np.array([len(item["modal_frequency"]) for item in modal], dtype=int),
        "delta_count": np.array([len(plant["delta"]) for plant in plants], dtype=int),
        "delta": _end_to_end([plant["delta"] for plant in plants]),
    }
    for name in _BY_MODE:
        columns[name] = _end_to_end([item[name] for item in modal])
    for name in _MATRICES:
        columns[name] = np.array([item.get(name, _zeros_like(item)) for item in modal], dtype=float)
    for name in _NUMBERS:
        columns[name] = np.array([item.get(name, 0.0) for item in modal], dtype=float)
    return columns | _label_columns(plants) | _covariance_columns(plants)


def _zeros_like(modal: dict[str, Any]) -> list[list[float]]:
    return [[0.0 for _ in row] for row in modal["feedthrough"]]


def _texts(values: list[str]) -> NDArray[Any]:
    return np.array(values, dtype=str)


def _end_to_end(pieces: list[Any]) -> NDArray[Any]:
    filled = [np.asarray(piece, dtype=float) for piece in pieces if len(piece)]
    return np.concatenate(filled) if filled else np.zeros(0)


def _label_columns(plants: list[dict[str, Any]]) -> Columns:
    names = sorted({name for plant in plants for name in plant["labels"]})
    columns: Columns = {}
    for name in names:
        values = [plant["labels"].get(name) for plant in plants]
        numeric = all(value is None or not isinstance(value, str) for value in values)
        blank: Any = 0.0 if numeric else ""
        kind: Any = float if numeric else str
        columns[f"has_label_{name}"] = np.array([value is not None for value in values])
        filled = [blank if value is None else value for value in values]
        columns[f"label_{name}"] = np.array(filled, dtype=kind)
    return columns


def _covariance_columns(plants: list[dict[str, Any]]) -> Columns:
    found = [plant.get("covariance") for plant in plants]
    names = [item["parameters"] if item else [] for item in found]
    matrices = [np.ravel(item["matrix"]).tolist() if item else [] for item in found]
    return {
        "parameter_count": np.array([len(item) for item in names], dtype=int),
        "parameter": _texts([name for item in names for name in item]),
        "covariance": _end_to_end(matrices),
    }


def plants_from_columns(columns: Columns, place: str) -> list[dict[str, Any]]:
    """Return plants as JSON values.

    Raises
    ------
    InputError
        Where a column is missing, not finite, or its length does not fit the counts.
    """
    _check(columns, place)
    modes = _edges(columns["mode_count"])
    factors = _edges(columns["delta_count"])
    names = _edges(columns["parameter_count"])
    squares = _edges(columns["parameter_count"] ** 2)
    return [
        _plant(columns, index, modes[index], factors[index], names[index], squares[index])
        for index in range(columns["response"].size)
    ]


def _edges(counts: NDArray[Any]) -> list[slice]:
    ends = np.concatenate([[0], np.cumsum(counts)]).astype(int).tolist()
    return [slice(start, stop) for start, stop in zip(ends[:-1], ends[1:], strict=True)]


def _plant(
    columns: Columns, index: int, modes: slice, factors: slice, names: slice, square: slice
) -> dict[str, Any]:
    plant: dict[str, Any] = {
        "response": str(columns["response"][index]),
        "labels": _labels(columns, index),
        "modal_parameters": _modal(columns, index, modes),
        "delay": float(columns["delay"][index]),
    }
    size = names.stop - names.start
    if size:
        plant["covariance"] = {
            "parameters": columns["parameter"][names].tolist(),
            "matrix": columns["covariance"][square].reshape(size, size).tolist(),
        }
    plant["delta"] = columns["delta"][factors].tolist()
    plant["reach"] = {
        "value": float(columns["reach"][index]),
        "frequency": float(columns["reach_frequency"][index]),
    }
    return plant


def _modal(columns: Columns, index: int, modes: slice) -> dict[str, Any]:
    base = str(columns["base"][index])
    modal: dict[str, Any] = {name: columns[name][modes].tolist() for name in _BY_MODE}
    modal["base"] = base
    if base == "free":
        modal["base_gain"] = columns["base_gain"][index].tolist()
    if base == "pivot":
        modal["base_frequency"] = float(columns["base_frequency"][index])
        modal["base_damping_ratio"] = float(columns["base_damping_ratio"][index])
        modal["base_residue"] = columns["base_residue"][index].tolist()
    modal["feedthrough"] = columns["feedthrough"][index].tolist()
    return modal


def _labels(columns: Columns, index: int) -> dict[str, Any]:
    start = len("has_label_")
    names = [name[start:] for name in columns if name.startswith("has_label_")]
    return {
        name: columns[f"label_{name}"][index].item()
        for name in names
        if columns[f"has_label_{name}"][index]
    }


def _check(columns: Columns, place: str) -> None:
    single = ("response", "delay", "reach", "reach_frequency", "base", *_MATRICES, *_NUMBERS)
    counts = ("mode_count", "delta_count", "parameter_count")
    for name in (*single, *counts, *_BY_MODE, "delta", "parameter", "covariance"):
        if name not in columns:
            raise InputError(Problem(f"{place}, field plants.{name}", "nothing", "this column"))
    plants = columns["response"].shape[0]
    sizes: dict[str, int] = dict.fromkeys((*single, *counts), int(plants))
    sizes |= dict.fromkeys(_BY_MODE, int(columns["mode_count"].sum()))
    sizes["delta"] = int(columns["delta_count"].sum())
    sizes["parameter"] = int(columns["parameter_count"].sum())
    sizes["covariance"] = int((columns["parameter_count"] ** 2).sum())
    sizes |= {name: plants for name in columns if name.startswith(("label_", "has_label_"))}
    for name, size in sizes.items():
        _check_column(columns[name], size, f"{place}, field plants.{name}")


def _check_column(column: NDArray[Any], size: int, place: str) -> None:
    if column.shape[0] != size:
        raise InputError(Problem(place, f"{column.shape[0]} entries", f"{size} entries"))
    if column.dtype.kind == "f" and not np.isfinite(column).all():
        raise InputError(Problem(place, "a number that is not finite", "finite numbers"))
