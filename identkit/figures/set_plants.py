"""The plants of a set file as labelled data, and their reach along frequency."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.plant_set.fields import FittedPlant, Matrices, PlantSetFields
from identkit.plant_set.pointwise import pointwise_reach
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


def left_out(contents: PlantSetFields) -> NDArray[np.bool_]:
    """Return (plants,) whether each plant of a set was left out of its bound."""
    out = {each.label for each in contents.certificate.measured.excluded}
    return np.array([plant.response in out for plant in contents.plants], dtype=bool)


def _column(plants: Sequence[FittedPlant], name: str) -> NDArray[Any]:
    values = [plant.labels.get(name) for plant in plants]
    if all(isinstance(value, int | float) for value in values if value is not None):
        return np.array([np.nan if value is None else value for value in values], dtype=float)
    return np.array(["" if value is None else str(value) for value in values])


def reach_along(contents: PlantSetFields, frequency: FloatArray) -> FloatArray | None:
    """Return the reach of every plant of a set at every frequency.

    Parameters
    ----------
    contents
        The set with its plants.
    frequency
        (points,) Hz.

    Returns
    -------
    FloatArray or None
        (plants, points); None for sampled sets and for forms whose reach is not one number per
        frequency.
    """
    if contents.form not in FORMS or contents.time.period > 0.0:
        return None
    nominal = _points_first(nominal_response(contents, frequency))
    outputs, inputs = nominal.shape[1:]
    sizes = {"additive": (outputs, inputs), "input-multiplicative": (inputs, inputs)}
    rows, columns = sizes.get(contents.form, (outputs, outputs))
    left = _weight(contents, contents.weights.left, rows, frequency)
    right = _weight(contents, contents.weights.right, columns, frequency)
    reach = [
        pointwise_reach(
            contents.form, _points_first(plant_response(plant, frequency)), nominal, left, right
        )
        for plant in contents.plants
    ]
    return np.array(reach, dtype=float).reshape(len(reach), frequency.size)


def _weight(
    contents: PlantSetFields, side: Matrices | None, size: int, frequency: FloatArray
) -> ComplexArray:
    if side is None:
        return np.broadcast_to(np.eye(size, dtype=complex), (frequency.size, size, size))
    return _points_first(state_space_response(side, set_points(contents, frequency)))


def _points_first(response: ComplexArray) -> ComplexArray:
    return np.moveaxis(response, -1, 0)
