"""Plain arrays out of a fits dataset: modes, their standard errors, groups of responses."""

import numpy as np
import xarray as xr

from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.mode_template import ModeTable
from identkit.stages.response_labels import text_label

CHANNEL_DIMS = ("response", "mode", "output", "input")


def mode_table(fits: xr.Dataset, groups: ModeTable | None = None) -> ModeTable:
    """Return all fitted modes of a fits dataset as plain arrays on the scales of pairing.

    Temperature, head and lot are taken from `groups` where given: a part of a campaign keeps
    the group numbers of the whole.
    """
    frequency = fits["modal_frequency"].values.astype(float)
    damping = fits["damping_ratio"].values.astype(float)
    residue = fits["residue"].transpose(*CHANNEL_DIMS).values.astype(float)
    channels = residue.reshape(*residue.shape[:2], residue.shape[2] * residue.shape[3])
    errors = mode_errors(fits)
    usable = (frequency > 0.0) & np.isfinite(damping) & np.isfinite(channels).all(axis=-1)
    frequency = np.where(usable, frequency, np.nan)
    # A damping ratio at or below zero has no logarithm; a millionth is far from any real one.
    positive = np.maximum(damping, 1e-6)
    return ModeTable(
        np.log(frequency),
        np.log(np.where(usable, positive, np.nan)),
        channels,
        _known(errors["modal_frequency"]) / np.where(usable, frequency, 1.0),
        _known(errors["damping_ratio"]) / np.where(usable, positive, 1.0),
        _known(errors["residue"].reshape(channels.shape)),
        *(_groups(fits) if groups is None else _same_groups(groups)),
    )


def mode_errors(fits: xr.Dataset) -> dict[str, FloatArray]:
    """Return standard errors of modal_frequency, damping_ratio and residue from the covariance.

    Parameters of one response are looked up by name (``modal_frequency_1`` ...); NaN where the
    fit gave none.
    """
    covariance = fits["parameter_covariance"].transpose("response", "parameter", "parameter_other")
    variance = np.diagonal(covariance.values, axis1=1, axis2=2)
    names = {str(name): k for k, name in enumerate(fits["parameter"].values)}
    shape = fits["residue"].transpose(*CHANNEL_DIMS).shape
    found = {
        "modal_frequency": np.full(shape[:2], np.nan),
        "damping_ratio": np.full(shape[:2], np.nan),
        "residue": np.full(shape, np.nan),
    }
    with np.errstate(invalid="ignore"):
        deviation = np.sqrt(variance)
    for k in range(shape[1]):
        for quantity in ("modal_frequency", "damping_ratio"):
            column = names.get(f"{quantity}_{k + 1}")
            if column is not None:
                found[quantity][:, k] = deviation[:, column]
        _residue_errors(found["residue"][:, k], names, deviation, k + 1)
    return found


def parameter_errors(data: xr.Dataset, name: str) -> FloatArray:
    """Return the standard error of one named parameter in every response; NaN where unknown."""
    if "parameter_covariance" not in data or name not in data["parameter"].values:
        return np.full(data.sizes["response"], np.nan)
    at = int(np.flatnonzero(data["parameter"].values == name)[0])
    variance = data["parameter_covariance"].isel(parameter=at, parameter_other=at).values
    return np.asarray(np.sqrt(np.where(variance >= 0.0, variance, np.nan)), dtype=float)


def channel_name(name: str, shape: tuple[int, ...], output: int, channel_input: int) -> str:
    """Return the name of one channel of a quantity; the plain name where there is one channel."""
    if shape == (1, 1):
        return name
    return f"{name}_{output + 1}_{channel_input + 1}"


def known_temperature(data: xr.Dataset) -> FloatArray:
    """Return temperatures, the median where one is missing, zeros where there is no label."""
    if "temperature" not in data.coords:
        return np.zeros(data.sizes["response"])
    temperature = data["temperature"].values.astype(float)
    known = np.isfinite(temperature)
    return np.where(known, temperature, np.median(temperature[known]) if known.any() else 0.0)


def group_index(data: xr.Dataset, label: str) -> IntArray:
    """Return the group of each response by a label, all 0 where no response has it."""
    names = text_label([data], label)
    if names is None:
        return np.zeros(data.sizes["response"], dtype=np.int64)
    return np.asarray(np.unique(names, return_inverse=True)[1], dtype=np.int64)


def _groups(fits: xr.Dataset) -> tuple[FloatArray, IntArray, IntArray, int, int]:
    head, lot = group_index(fits, "head"), group_index(fits, "lot")
    heads, lots = int(head.max(initial=0)) + 1, int(lot.max(initial=0)) + 1
    return known_temperature(fits), head, lot, heads, lots


def _same_groups(groups: ModeTable) -> tuple[FloatArray, IntArray, IntArray, int, int]:
    return groups.temperature, groups.head, groups.lot, groups.heads, groups.lots


def _residue_errors(
    into: FloatArray, names: dict[str, int], deviation: FloatArray, number: int
) -> None:
    """Fill (response, output, input) from ``residue_k`` or ``residue_k_output_input``."""
    outputs, inputs = into.shape[1:]
    for o in range(outputs):
        for i in range(inputs):
            for name in (f"residue_{number}_{o + 1}_{i + 1}", f"residue_{number}"):
                if name in names:
                    into[:, o, i] = deviation[:, names[name]]
                    break


def _known(error: FloatArray) -> FloatArray:
    return np.where(np.isfinite(error), error, 0.0)
