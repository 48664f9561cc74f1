"""Measured responses from NetCDF-4 or HDF5 files in the project's own layout."""

from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import datasets, load
from identkit.methods.arrays import BoolArray, FloatArray
from identkit.readers.measured import VARIANCE_SOURCES, MeasuredResponse, first_fault, with_variance
from identkit.readers.path_pattern import Label, LabelledFile, checked_label
from identkit.settings import ResponseSettings
from identkit.units import FREQUENCY_UNITS, hertz_per

SUFFIXES = (".nc", ".nc4", ".cdf", ".h5", ".hdf5", ".he5")

_DIMS = ("response", "output", "input", "frequency")
_POINTS = ("frequency_response_variance", "coherence", "usable_mask")


def read_netcdf(
    file: LabelledFile, options: ResponseSettings, place: str
) -> list[tuple[LabelledFile, MeasuredResponse]]:
    """Read every response of one file, with the labels it carries.

    Parameters
    ----------
    file
        The file; labels of its path go before labels inside it.
    options
        Averages, units and sample period of the study.
    place
        What to call the file in messages.

    Raises
    ------
    InputError
        If the file is damaged or does not keep the layout, or a response breaks a rule.
    """
    try:
        parts = datasets(load(file.path))
    except InputError as error:
        raise InputError([replace(each, place=place) for each in error.problems]) from error
    found = []
    for number, part in enumerate(parts, start=1):
        where = place if len(parts) == 1 else f"{place}, grid_{number}"
        ordered = _ordered(_named_dims(part, where), where)
        _refuse_other_study(ordered, options, where)
        found += list(_responses(ordered, file, options, where))
    return found


def _named_dims(part: xr.Dataset, place: str) -> xr.Dataset:
    """Name the dimensions of a plain HDF5 file by the arrays that span them."""
    for name in ("frequency_response", "frequency"):
        if name not in part.variables:
            there = ", ".join(str(each) for each in part.variables) or "nothing"
            raise InputError(Problem(place, there, f"also the variable {name}"))
    dims = part["frequency_response"].dims
    if not any(str(dim).startswith("phony_dim") for dim in dims):
        return part
    if len(dims) != len(_DIMS) or len(set(dims)) != len(dims):
        found = f"frequency_response without names of its {len(dims)} dimensions"
        raise InputError(Problem(place, found, f"the dimensions {_DIMS}"))
    return part.rename(dict(zip(dims, _DIMS, strict=True)))


def _ordered(part: xr.Dataset, place: str) -> xr.Dataset:
    """Return the part with all four dimensions, in order, and frequency in Hz."""
    missing = [dim for dim in _DIMS if dim not in part["frequency_response"].dims]
    if "frequency" in missing or part["frequency"].dims != ("frequency",):
        dims = part["frequency_response"].dims
        raise InputError(Problem(place, f"frequency_response along {dims}", f"along {_DIMS}"))
    for dim in missing:
        points = [n for n in ("frequency_response", *_POINTS) if n in part]
        part = part.assign({n: part[n].expand_dims(dim) for n in points if dim not in part[n].dims})
    for name in ("output", "input"):
        if part.sizes[name] != 1:
            found = f"{part.sizes[name]} channels along {name}"
            expected = "1; plants of several channels are not available in this version"
            raise InputError(Problem(place, found, expected))
    if part["frequency_response"].dtype.kind != "c":
        found = f"frequency_response of type {part['frequency_response'].dtype}"
        raise InputError(Problem(place, found, "complex numbers, the compound type {r, i}"))
    unit = str(part["frequency"].attrs.get("units", "Hz"))
    try:
        hertz = part["frequency"].values * hertz_per(unit)
    except KeyError:
        expected = "one of " + ", ".join(FREQUENCY_UNITS)
        raise InputError(Problem(place, f'frequency in "{unit}"', expected)) from None
    return part.assign_coords(frequency=hertz)


def _refuse_other_study(part: xr.Dataset, options: ResponseSettings, place: str) -> None:
    """Refuse a file whose units or sample period differ from the study's."""
    wanted = {
        "input_unit": options.units.input,
        "output_unit": options.units.output,
        "sample_period": options.sample_period,
    }
    for name, value in wanted.items():
        there = part.attrs.get(name, value)
        if there != value and not (value == "" or there == ""):
            raise InputError(Problem(f"{place}, {name}", str(there), f"{value}, as the study says"))


def _responses(
    part: xr.Dataset, file: LabelledFile, options: ResponseSettings, place: str
) -> Iterator[tuple[LabelledFile, MeasuredResponse]]:
    frequency = np.asarray(part["frequency"].values, dtype=np.float64)
    points = {
        name: part[name].transpose(*_DIMS).values[:, 0, 0, :]
        for name in ("frequency_response", *_POINTS)
        if name in part
    }
    averages = _averages(part, options)
    source = _stated_source(part)
    for k in range(part.sizes["response"]):
        labels = _labels_of(part, k, place)
        name = str(labels.pop("response", k + 1))
        measured = _one(
            frequency, {n: v[k] for n, v in points.items()}, f"{place}, response {name}"
        )
        if source and measured.variance is not None:
            measured = replace(measured, variance_source=source)
        measured = replace(
            with_variance(measured, averages[k]),
            input_unit=str(part.attrs.get("input_unit", "")),
            output_unit=str(part.attrs.get("output_unit", "")),
        )
        yield LabelledFile(file.path, name, labels | file.labels), measured


def _stated_source(part: xr.Dataset) -> str:
    """Return how the file says its variance is known, "" where it says nothing we know."""
    source = str(part.attrs.get("variance_source", ""))
    return source if source in VARIANCE_SOURCES else ""


def _averages(part: xr.Dataset, options: ResponseSettings) -> list[float | None]:
    if options.averages is not None or "averages" not in part:
        return [options.averages] * part.sizes["response"]
    values = np.broadcast_to(part["averages"].values, (part.sizes["response"],))
    return [float(value) if value > 1 else None for value in values]


def _one(frequency: FloatArray, points: dict[str, Any], place: str) -> MeasuredResponse:
    """Take one response, judged where it has values; points without stay as they are."""
    response = np.asarray(points["frequency_response"], dtype=np.complex128)
    coherence, variance = points.get("coherence"), points.get("frequency_response_variance")
    present = ~np.isnan(response)
    fault = first_fault(
        frequency[present], response[present], _at(coherence, present), _at(variance, present)
    )
    if fault:
        index = np.flatnonzero(present)[fault.index] if fault.index >= 0 else -1
        where = place if index < 0 else f"{place}, point {index + 1}"
        raise InputError(Problem(where, fault.found, fault.expected))
    source = "residuals" if variance is None else "measured"
    usable = points.get("usable_mask")
    return MeasuredResponse(frequency, response, variance, coherence, source, usable=usable)


def _at(values: FloatArray | None, present: BoolArray) -> FloatArray | None:
    return None if values is None else np.asarray(values, dtype=np.float64)[present]


def _labels_of(part: xr.Dataset, k: int, place: str) -> dict[str, Label]:
    """Return the labels of one response, channel names included, missing ones left out."""
    labels: dict[str, Label] = {}
    for name, values in part.variables.items():
        if values.dims == ("response",) and name not in ("averages", "source"):
            value = values.values[k].item() if values.dtype.kind in "fiu" else str(values.values[k])
            if value not in ("", "nan", "NaT") and value == value:
                labels[str(name)] = checked_label(str(name), value, place)
    for name in ("output", "input"):
        if name in part.coords:
            labels[name] = str(part[name].values.reshape(-1)[0])
    return labels
