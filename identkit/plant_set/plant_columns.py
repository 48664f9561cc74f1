"""Many plants as columns: what differs in length between plants stands end to end.

`mode_count`, `delta_count` and `parameter_count` say how many entries of the flat columns belong to
each plant. Labels are columns `label_<name>` with `has_label_<name>`: a missing label is missing.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import Covariance, FittedPlant
from identkit.plant_set.plant_document import BASES

Columns = dict[str, NDArray[Any]]

_BY_MODE = ("modal_frequency", "damping_ratio", "residue", "residue_rate")
_MATRICES = ("base_gain", "base_residue", "feedthrough")
_NUMBERS = ("delay", "base_frequency", "base_damping_ratio", "reach", "reach_frequency")
_TEXTS = ("response", "base")
_COUNTS = ("mode_count", "delta_count", "parameter_count")


def plants_to_columns(plants: Sequence[FittedPlant], shape: tuple[int, int]) -> Columns:
    """Return plants as columns; `shape` is (outputs, inputs)."""
    columns: Columns = {
        name: np.array([getattr(plant, name) for plant in plants], dtype=str) for name in _TEXTS
    }
    for name in _NUMBERS:
        columns[name] = np.array([getattr(plant, name) for plant in plants], dtype=float)
    for name in _MATRICES:
        matrices = [getattr(plant, name) for plant in plants]
        columns[name] = np.array(matrices, dtype=float).reshape(len(plants), *shape)
    columns["mode_count"] = np.array([plant.modal_frequency.size for plant in plants], dtype=int)
    columns["delta_count"] = np.array([plant.delta.size for plant in plants], dtype=int)
    for name in (*_BY_MODE, "delta"):
        tail = shape if name.startswith("residue") else ()
        columns[name] = _end_to_end([getattr(plant, name) for plant in plants], tail)
    return columns | _label_columns(plants) | _covariance_columns(plants)


def _end_to_end(pieces: Sequence[NDArray[Any]], tail: tuple[int, ...] = ()) -> NDArray[Any]:
    filled = [piece for piece in pieces if piece.size]
    return np.concatenate(filled).astype(float) if filled else np.zeros((0, *tail))


def _label_columns(plants: Sequence[FittedPlant]) -> Columns:
    names = sorted({name for plant in plants for name in plant.labels})
    columns: Columns = {}
    for name in names:
        values = [plant.labels.get(name) for plant in plants]
        texts = [isinstance(value, str) for value in values if value is not None]
        numeric = not any(texts)
        if any(texts) and not all(texts):
            expected = "one or the other in all plants"
            raise InputError(Problem(f"label {name}", "text here and a number there", expected))
        blank: Any = 0.0 if numeric else ""
        filled = [blank if value is None else value for value in values]
        columns[f"has_label_{name}"] = np.array([value is not None for value in values])
        columns[f"label_{name}"] = np.array(filled, dtype=float if numeric else str)
    return columns


def _covariance_columns(plants: Sequence[FittedPlant]) -> Columns:
    found = [plant.covariance for plant in plants]
    names = [item.parameters if item is not None else () for item in found]
    return {
        "parameter_count": np.array([len(item) for item in names], dtype=int),
        "parameter": np.array([name for item in names for name in item], dtype=str),
        "covariance": _end_to_end([item.matrix.ravel() for item in found if item is not None]),
    }


def plants_from_columns(
    columns: Columns, place: str, shape: tuple[int, int]
) -> tuple[FittedPlant, ...]:
    """Return the plants; `shape` is (outputs, inputs).

    Raises
    ------
    InputError
        Where a column is missing, not finite, or its shape does not fit the counts.
    """
    _check(columns, place, shape)
    modes = _edges(columns["mode_count"])
    factors = _edges(columns["delta_count"])
    names = _edges(columns["parameter_count"])
    squares = _edges(columns["parameter_count"] ** 2)
    return tuple(
        _plant(columns, index, modes[index], factors[index], names[index], squares[index])
        for index in range(columns["response"].size)
    )


def _edges(counts: NDArray[Any]) -> list[slice]:
    ends = np.concatenate([[0], np.cumsum(counts)]).astype(int).tolist()
    return [slice(start, stop) for start, stop in zip(ends[:-1], ends[1:], strict=True)]


def _plant(
    columns: Columns, index: int, modes: slice, factors: slice, names: slice, square: slice
) -> FittedPlant:
    size = names.stop - names.start
    covariance = None
    if size:
        matrix = columns["covariance"][square].reshape(size, size)
        covariance = Covariance(tuple(columns["parameter"][names].tolist()), matrix)
    values: dict[str, Any] = {name: str(columns[name][index]) for name in _TEXTS}
    values |= {name: float(columns[name][index]) for name in _NUMBERS}
    values |= {name: columns[name][index] for name in _MATRICES}
    values |= {name: columns[name][modes] for name in _BY_MODE}
    return FittedPlant(
        **values,
        labels=_labels(columns, index),
        covariance=covariance,
        delta=columns["delta"][factors],
    )


def _labels(columns: Columns, index: int) -> dict[str, Any]:
    start = len("has_label_")
    names = [name[start:] for name in columns if name.startswith("has_label_")]
    return {
        name: columns[f"label_{name}"][index].item()
        for name in names
        if columns[f"has_label_{name}"][index]
    }


def _check(columns: Columns, place: str, shape: tuple[int, int]) -> None:
    flat = (*_BY_MODE, "delta", "parameter", "covariance")
    for name in (*_TEXTS, *_NUMBERS, *_MATRICES, *_COUNTS, *flat):
        if name not in columns:
            raise InputError(Problem(f"{place}, field plants.{name}", "nothing", "this column"))
    for name in _COUNTS:
        if columns[name].dtype.kind not in "iu" or (columns[name] < 0).any():
            place_of = f"{place}, field plants.{name}"
            raise InputError(Problem(place_of, "other values", "whole numbers, 0 or more"))
    for name, size in _shapes(columns, shape).items():
        _check_column(columns[name], size, f"{place}, field plants.{name}")
    for name in set(columns["base"].tolist()) - set(BASES):
        expected = f"one of {', '.join(BASES)}"
        raise InputError(Problem(f"{place}, field plants.base", repr(name), expected))


def _shapes(columns: Columns, shape: tuple[int, int]) -> dict[str, tuple[int, ...]]:
    """Return the shape every column must have."""
    plants = int(columns["response"].size)
    modes, factors, parameters = (int(columns[name].sum()) for name in _COUNTS)
    named = [name for name in columns if name.startswith(("label_", "has_label_"))]
    sizes: dict[str, tuple[int, ...]] = dict.fromkeys(
        (*_TEXTS, *_NUMBERS, *_COUNTS, *named), (plants,)
    )
    sizes |= dict.fromkeys(_MATRICES, (plants, *shape))
    sizes |= dict.fromkeys(("modal_frequency", "damping_ratio"), (modes,))
    sizes |= dict.fromkeys(("residue", "residue_rate"), (modes, *shape))
    sizes["delta"], sizes["parameter"] = (factors,), (parameters,)
    sizes["covariance"] = (int((columns["parameter_count"] ** 2).sum()),)
    return sizes


def _check_column(column: NDArray[Any], shape: tuple[int, ...], place: str) -> None:
    if column.shape != shape:
        raise InputError(Problem(place, f"numbers of shape {column.shape}", f"shape {shape}"))
    if column.dtype.kind == "f" and not np.isfinite(column).all():
        raise InputError(Problem(place, "a number that is not finite", "finite numbers"))
