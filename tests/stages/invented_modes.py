"""Modes and population datasets made of given plants, as pairing and population write them."""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.methods.modal_model import ModalParameters

SCALARS = ("base_gain", "base_frequency", "base_damping_ratio", "base_residue", "feedthrough")


def modes_dataset(plants: Sequence[ModalParameters], extra: int = 0) -> xr.Dataset:
    """Return paired modes; plants with fewer modes than the longest are padded with NaN."""
    count, width = len(plants), max(plant.modal_frequency.size for plant in plants)

    def table(name: str) -> np.ndarray:
        rows = [getattr(plant, name) for plant in plants]
        return np.array([np.append(row, np.full(width - row.size, np.nan)) for row in rows])

    channel = ("response", "mode", "output", "input")
    scalars = {name: np.array([getattr(plant, name) for plant in plants]) for name in SCALARS}
    flat = {"base_frequency", "base_damping_ratio"}
    return xr.Dataset(
        {
            "modal_frequency": (("response", "mode"), table("modal_frequency")),
            "damping_ratio": (("response", "mode"), table("damping_ratio")),
            "residue": (channel, table("residue")[:, :, None, None]),
            "residue_rate": (channel, table("residue_rate")[:, :, None, None]),
            **{
                name: ("response", values)
                if name in flat
                else (("response", "output", "input"), values[:, None, None])
                for name, values in scalars.items()
            },
            "delay": ("response", np.array([plant.delay for plant in plants])),
            "fit_outcome": ("response", np.zeros(count, dtype=np.int8)),
        },
        coords={
            "response": [f"r{k:02d}" for k in range(count)],
            "unit": ("response", [f"U{k // 2:02d}" for k in range(count)]),
            "temperature": ("response", np.full(count, 25.0)),
            "mode": [
                *[f"M{k + 1}" for k in range(width - extra)],
                *[f"E{k + 1}" for k in range(extra)],
            ],
        },
        attrs={"base": plants[0].base, "input_unit": "A", "output_unit": "um"},
    )


def population_dataset(centre: ModalParameters) -> xr.Dataset:
    """Return a population whose values are those of `centre`."""
    quantities = ["modal_frequency", "damping_ratio", "residue"]
    values = np.column_stack([getattr(centre, name) for name in quantities])
    return xr.Dataset(
        {
            "population_value": (("mode", "quantity"), values),
            **{name: ((), float(getattr(centre, name))) for name in (*SCALARS, "delay")},
        },
        coords={
            "mode": [f"M{k + 1}" for k in range(len(values))],
            "quantity": quantities,
        },
        attrs={"reference_temperature": 25.0, "base": centre.base},
    )
