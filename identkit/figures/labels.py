"""Names of responses as a person reads them, and groups to tell apart by colour."""

import re
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.figures.style import GROUP_COLOURS
from identkit.methods.arrays import FloatArray, IntArray

TextArray = NDArray[np.str_]


@dataclass(frozen=True)
class Groups:
    """Responses sorted into a few groups.

    Attributes
    ----------
    name
        The label that tells the groups apart ("lot", "head" ...); "" where there is one group.
    values
        Name of each group.
    member
        (responses,) index of each response's group.
    """

    name: str
    values: tuple[str, ...]
    member: IntArray


def natural_key(text: str) -> list[tuple[int, str]]:
    """Return a sorting key under which U2 stands before U10."""
    return [
        (int(part), "") if part.isdigit() else (-1, part)
        for part in re.split(r"(\d+)", text)
        if part
    ]


def text_label(data: xr.Dataset, name: str) -> TextArray | None:
    """Return a label of every response as text, or None where the data do not carry it."""
    if name not in data.coords or data[name].dims != ("response",):
        return None
    values = data[name].values
    if values.dtype.kind == "f":
        return np.array(["" if np.isnan(v) else f"{v:g}" for v in values], dtype=str)
    return values.astype(str)


def number_label(data: xr.Dataset, name: str) -> FloatArray:
    """Return a numeric label of every response; NaN where the data do not carry it."""
    if name not in data.coords or data[name].dtype.kind not in "fiu":
        return np.full(data.sizes["response"], np.nan)
    return data[name].values.astype(float)


def units_of(data: xr.Dataset) -> TextArray:
    """Return the unit of every response; the response itself where no unit is named."""
    named = text_label(data, "unit")
    ids = data["response"].values.astype(str)
    return ids if named is None else np.where(named == "", ids, named)


def spoken_unit(name: str) -> str:
    """Return the name of a unit as it may stand in a sentence: 'unit 3' where it is a number."""
    return name if any(letter.isalpha() for letter in name) else f"unit {name}"


def condition_of(data: xr.Dataset) -> TextArray:
    """Return head, temperature and position of every response as one short text."""
    heads, positions = text_label(data, "head"), text_label(data, "position")
    temperatures = number_label(data, "temperature")
    texts = []
    for at in range(data.sizes["response"]):
        parts = []
        if heads is not None and heads[at]:
            parts.append(f"head {heads[at]}")
        if positions is not None and positions[at]:
            parts.append(f"position {positions[at]}")
        if np.isfinite(temperatures[at]):
            parts.append(f"{temperatures[at]:g} °C")
        texts.append(", ".join(parts))
    return np.array(texts, dtype=str)


def short_names(data: xr.Dataset) -> TextArray:
    """Return 'U05, head 2, 50 °C' for every response, or its id where no unit is named."""
    named = text_label(data, "unit")
    ids = data["response"].values.astype(str)
    if named is None:
        return ids
    conditions = condition_of(data)
    names = [
        ", ".join(part for part in (unit and spoken_unit(unit), condition) if part) or identifier
        for unit, condition, identifier in zip(named, conditions, ids, strict=True)
    ]
    return np.array(names, dtype=str)


def groups_of(data: xr.Dataset, *candidates: str) -> Groups:
    """Group responses by the first label that has from two to eight values."""
    for name in candidates:
        values = text_label(data, name)
        if values is None:
            continue
        distinct = sorted(set(values.tolist()), key=natural_key)
        if 2 <= len(distinct) <= len(GROUP_COLOURS):
            member = np.array([distinct.index(value) for value in values.tolist()])
            shown = tuple(value or "not stated" for value in distinct)
            return Groups(name, shown, member)
    return Groups("", ("all responses",), np.zeros(data.sizes["response"], dtype=int))


def reading_order(data: xr.Dataset) -> IntArray:
    """Return the order of responses by unit, head, temperature and id."""
    units, ids = units_of(data), data["response"].values.astype(str)
    heads = text_label(data, "head")
    temperatures = np.nan_to_num(number_label(data, "temperature"), nan=-np.inf)
    keys = [
        (
            natural_key(str(units[at])),
            natural_key("" if heads is None else str(heads[at])),
            float(temperatures[at]),
            str(ids[at]),
        )
        for at in range(ids.size)
    ]
    return np.array(sorted(range(ids.size), key=keys.__getitem__), dtype=int)


def nearest_mode(frequency: float, names: list[str], modal_frequency: FloatArray) -> str:
    """Return the mode nearest in log frequency, "" where none is within a factor of 1.3."""
    if not frequency > 0.0 or not np.isfinite(modal_frequency).any():
        return ""
    distance = np.abs(np.log(modal_frequency / frequency))
    at = int(np.nanargmin(distance))
    return names[at] if distance[at] < np.log(1.3) else ""
