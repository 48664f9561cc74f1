"""Unexplained share: how much of a response its fit leaves, point by point."""

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import modal_response
from identkit.plants import plant_parameters


def unexplained_share(
    fits: xr.Dataset, responses: Gridded, screening: Gridded | None = None
) -> FloatArray:
    """Return what every fit leaves of its response, from 0 (nothing) to 1 (all of it).

    The root mean square over the usable points of abs(measured - fitted) / abs(measured), each
    point counting at most 1. Relative, so that a resonance or an end of the band that the fit
    misses counts however small it is beside the rest.

    Parameters
    ----------
    fits
        Fits or paired modes of scalar plants.
    responses, screening
        What was fitted.

    Returns
    -------
    FloatArray
        (responses,), NaN where nothing was fitted or measured.

    Raises
    ------
    InputError
        If the grids of the screening are not those of the responses.
    """
    parts = datasets(responses)
    marks = [None] * len(parts) if screening is None else datasets(screening)
    if len(marks) != len(parts):
        found, expected = f"{len(marks)} grids", f"the {len(parts)} grids of the responses"
        raise InputError(Problem("screening", found, expected))
    rows = {str(name): row for row, name in enumerate(fits["response"].values)}
    share = np.full(len(rows), np.nan)
    for part, mark in zip(parts, marks, strict=True):
        frequency = part["frequency"].values
        measured = _channel(part, "frequency_response")
        source = part if mark is None else mark
        usable = np.isfinite(measured)
        if "usable_mask" in source:
            usable &= _channel(source, "usable_mask").astype(bool)
        for k, name in enumerate(part["response"].values):
            row = rows.get(str(name), -1)
            if row >= 0:
                share[row] = _left(fits, row, frequency[usable[k]], measured[k, usable[k]])
    return share


def _left(fits: xr.Dataset, row: int, frequency: FloatArray, measured: ComplexArray) -> float:
    plant = plant_parameters(fits, row)
    known = all(
        np.isfinite(value).all() for value in vars(plant).values() if not isinstance(value, str)
    )
    if not known or frequency.size == 0:
        return float("nan")
    relative = np.abs(modal_response(frequency, plant) / measured - 1.0)
    return float(np.sqrt(np.mean(np.minimum(relative, 1.0) ** 2)))


def _channel(part: xr.Dataset, name: str) -> np.ndarray:
    order = ("response", "output", "input", "frequency")
    return np.asarray(part[name].transpose(*order).values[:, 0, 0, :])
