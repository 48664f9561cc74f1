"""One response's plant out of labelled fits."""

import numpy as np
import pytest
import xarray as xr

from identkit.plants import plant_parameters


def labelled(base):
    modal = ("response", "mode")
    matrix = (*modal, "output", "input")
    one = ("response", "output", "input")
    values = {
        "modal_frequency": (modal, [[np.nan, 200.0, 100.0]]),
        "damping_ratio": (modal, [[np.nan, 0.02, 0.01]]),
        "residue": (matrix, np.array([[np.nan, 5.0, -3.0]])[:, :, None, None]),
        "residue_rate": (matrix, np.array([[np.nan, 0.5, np.nan]])[:, :, None, None]),
        "feedthrough": (one, [[[0.25]]]),
        "delay": ("response", [1e-5]),
    }
    if base == "free":
        values["base_gain"] = (one, [[[7.0]]])
    if base == "pivot":
        values["base_frequency"] = ("response", [3.0])
        values["base_damping_ratio"] = ("response", [0.4])
        values["base_residue"] = (one, [[[9.0]]])
    return xr.Dataset(values, attrs={"base": base})


@pytest.mark.parametrize("base", ["free", "pivot", "none"])
def test_missing_modes_are_left_out_and_the_order_is_kept(base):
    plant = plant_parameters(labelled(base), 0)
    np.testing.assert_array_equal(plant.modal_frequency, [200.0, 100.0])
    np.testing.assert_array_equal(plant.residue, [5.0, -3.0])
    np.testing.assert_array_equal(plant.residue_rate, [0.5, 0.0])
    assert (plant.feedthrough, plant.delay, plant.base) == (0.25, 1e-5, base)
    assert plant.base_gain == (7.0 if base == "free" else 0.0)
    assert plant.base_frequency == (3.0 if base == "pivot" else 0.0)
    assert plant.base_residue == (9.0 if base == "pivot" else 0.0)
