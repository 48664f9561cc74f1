"""Plants in and out of labelled modal parameters."""

import numpy as np
import xarray as xr

from identkit.methods.arrays import BoolArray
from identkit.methods.modal_model import ModalParameters
from identkit.outcomes import Outcome

MOST_UNEXPLAINED = 0.5
"""Share of a response that a fit without modes may leave and still be its plant."""
_NOT_FITTED = (Outcome.TOO_FEW_POINTS, Outcome.NOT_FINITE, Outcome.NOT_FITTED)


def lacks_plant(fits: xr.Dataset) -> BoolArray:
    """Tell which responses have no plant by the outcome of their fit.

    A fit without modes is a plant (base, feedthrough and delay) where it explains its response:
    where `unexplained_share` is known and at most `MOST_UNEXPLAINED`. Noise has no modes either.

    Parameters
    ----------
    fits
        Fits or paired modes.

    Returns
    -------
    BoolArray
        (responses,).
    """
    outcome = fits["fit_outcome"].values
    unexplained = np.full(outcome.shape, np.inf)
    if "unexplained_share" in fits:
        unexplained = fits["unexplained_share"].values
    # A share that is not known is not small: the comparison is False for NaN.
    empty = (outcome == Outcome.NO_MODES) & ~(unexplained <= MOST_UNEXPLAINED)
    return np.asarray(empty | np.isin(outcome, [int(code) for code in _NOT_FITTED]), dtype=bool)


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
    residue, rate = (
        one[name].transpose("mode", "output", "input").values[:, 0, 0]
        for name in ("residue", "residue_rate")
    )
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
