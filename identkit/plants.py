"""Plants in and out of labelled modal parameters."""

import numpy as np
import xarray as xr

from identkit.methods.modal_model import ModalParameters


def plant_parameters(fits: xr.Dataset, index: int) -> ModalParameters:
    """Return the plant of one response of a fits or modes dataset.

    Parameters
    ----------
    fits
        Dims response, mode, output, input, as `fit_modes` or `pair_modes` write it; scalar plants.
    index
        Position along `response`.

    Returns
    -------
    ModalParameters
        Its modes in the order of `mode`, extra modes included, modes without a value left out.
    """
    one = fits.isel(response=index)
    frequency = np.asarray(one["modal_frequency"].values, dtype=float)
    found = np.isfinite(frequency)
    base = str(fits.attrs["base"])
    residue = one["residue"].values.reshape(frequency.size, -1)[:, 0]
    rate = one["residue_rate"].values.reshape(frequency.size, -1)[:, 0]
    return ModalParameters(
        frequency[found],
        np.asarray(one["damping_ratio"].values, dtype=float)[found],
        residue[found],
        np.nan_to_num(rate[found]),
        base,
        base_gain=_scalar(one, "base_gain") if base == "free" else 0.0,
        base_frequency=_scalar(one, "base_frequency") if base == "pivot" else 0.0,
        base_damping_ratio=_scalar(one, "base_damping_ratio") if base == "pivot" else 0.0,
        base_residue=_scalar(one, "base_residue") if base == "pivot" else 0.0,
        feedthrough=_scalar(one, "feedthrough"),
        delay=_scalar(one, "delay"),
    )


def _scalar(one: xr.Dataset, name: str) -> float:
    return float(one[name].values.reshape(-1)[0])
