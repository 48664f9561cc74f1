"""The plants of a set file as labelled data, and their reach along frequency."""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.plant_set.fields import FittedPlant, Matrices, PlantSetFields
from identkit.plant_set.response import (
    nominal_response,
    plant_response,
    set_points,
    state_space_response,
)

FORMS = ("multiplicative", "input-multiplicative", "additive", "inverse-multiplicative")


def labelled(plants: Sequence[FittedPlant]) -> xr.Dataset:
    """Return reach and its frequency of every plant, with the plants' labels along `response`."""
    names = sorted({name for plant in plants for name in plant.labels})
    coords = {name: ("response", _column(plants, name)) for name in names}
    return xr.Dataset(
        {
            "reach": ("response", np.array([plant.reach for plant in plants], dtype=float)),
            "reach_frequency": (
                "response",
                np.array([plant.reach_frequency for plant in plants], dtype=float),
            ),
        },
        coords={"response": [plant.response for plant in plants], **coords},
    )


def _column(plants: Sequence[FittedPlant], name: str) -> np.ndarray:
    values = [plant.labels.get(name) for plant in plants]
    if all(isinstance(value, int | float) for value in values if value is not None):
        return np.array([np.nan if value is None else value for value in values], dtype=float)
    return np.array(["" if value is None else str(value) for value in values])


def reach_along(contents: PlantSetFields, frequency: FloatArray) -> FloatArray | None:
    """Return the reach of every plant at every frequency.

    Parameters
    ----------
    contents
        The set with its plants.
    frequency
        (points,) Hz.

    Returns
    -------
    FloatArray or None
        (plants, points); None for matrix plants, for sampled sets and for forms whose reach is
        not one number per frequency.
    """
    if not contents.is_scalar or contents.form not in FORMS or contents.time.period > 0.0:
        return None
    nominal = nominal_response(contents, frequency)[0, 0]
    plants = np.array([plant_response(plant, frequency)[0, 0] for plant in contents.plants])
    if not len(plants):
        return np.zeros((0, frequency.size))
    return error_of(contents.form, plants, nominal) / weight_along(contents, frequency)


def error_of(form: str, plants: ComplexArray, nominal: ComplexArray) -> FloatArray:
    """Return the magnitude of each plant's error in one of the scalar forms."""
    if form == "additive":
        return np.abs(plants - nominal)
    if form == "inverse-multiplicative":
        return np.abs(nominal / plants - 1.0)
    return np.abs(plants / nominal - 1.0)


def weight_along(contents: PlantSetFields, frequency: FloatArray) -> FloatArray:
    """Return the product of the scalar weights' magnitudes at (points,) Hz."""
    points = set_points(contents, frequency)
    magnitude = np.ones(frequency.size)
    for side in (contents.weights.left, contents.weights.right):
        if isinstance(side, Matrices):
            magnitude = magnitude * np.abs(state_space_response(side, points)[0, 0])
    return magnitude
