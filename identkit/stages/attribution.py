"""Who sets the bound where: contiguous frequency intervals, each with the plant that decides."""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.forms.bounding import SpreadBound
from identkit.methods.arrays import FloatArray


def nearest_modes(frequency: FloatArray, nominal: xr.Dataset) -> list[str]:
    """Return the name of the nominal's mode nearest on a log scale; "" where there is none."""
    names = [str(name) for name in nominal["mode"].values]
    modal = np.asarray(nominal["modal_frequency"].values, dtype=float)
    if str(nominal.attrs["base"]) == "pivot":
        names.append("pivot")
        modal = np.append(modal, float(nominal["base_frequency"].values))
    return [
        names[int(np.argmin(np.abs(np.log(modal / at))))] if np.isfinite(at) and names else ""
        for at in frequency
    ]


def attribution_table(found: SpreadBound, names: Sequence[str], nominal: xr.Dataset) -> xr.Dataset:
    """List the intervals in which one plant sets the required radius, by rising frequency.

    Parameters
    ----------
    found
        The bound.
    names
        Ids of its plants.
    nominal
        For the names of its modes.

    Returns
    -------
    Dataset
        Along ``interval``: ``interval_low``, ``interval_high`` (Hz), ``interval_response`` (id; ""
        where the radius floor decides), ``interval_reach`` (largest required radius over weight
        inside) at ``interval_frequency``, ``interval_mode``.
    """
    curve = found.curve
    ratio = curve.required / found.weight.magnitude(curve.frequency)
    first = np.flatnonzero(np.concatenate([[True], np.diff(curve.setter) != 0]))
    last = np.concatenate([first[1:], [curve.setter.size]])
    peak = np.array([a + int(np.argmax(ratio[a:b])) for a, b in zip(first, last, strict=True)])
    edges = np.sqrt(curve.frequency[1:] * curve.frequency[:-1])
    edges = np.concatenate([curve.frequency[:1], edges, curve.frequency[-1:]])
    label = [*names, ""]
    return xr.Dataset(
        {
            "interval_low": ("interval", edges[first]),
            "interval_high": ("interval", edges[last]),
            "interval_response": ("interval", [label[curve.setter[at]] for at in first]),
            "interval_reach": ("interval", ratio[peak]),
            "interval_frequency": ("interval", curve.frequency[peak]),
            "interval_mode": ("interval", nearest_modes(curve.frequency[peak], nominal)),
        }
    )
