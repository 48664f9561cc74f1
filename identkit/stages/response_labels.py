"""Text labels of responses: a missing label is missing, never invented."""

from collections.abc import Sequence

import numpy as np
import xarray as xr
from numpy.typing import NDArray

NOT_LABELLED = "not labelled"


def text_label(parts: Sequence[xr.Dataset], label: str) -> NDArray[np.str_] | None:
    """Return one label of all responses of several datasets.

    Parameters
    ----------
    parts
        Datasets with a response dimension.
    label
        Name of the label.

    Returns
    -------
    array of str or None
        "not labelled" where it is missing; None where no response has it.
    """
    found = [
        part[label].values.astype(str) if label in part.coords else np.full(size, "")
        for part, size in ((part, part.sizes["response"]) for part in parts)
    ]
    names = np.concatenate(found).astype(str) if found else np.zeros(0, dtype=str)
    missing = np.isin(names, ["", "nan", "None"])
    if missing.all():
        return None
    return np.where(missing, NOT_LABELLED, names)


def unit_label(parts: Sequence[xr.Dataset]) -> NDArray[np.str_] | None:
    """Return the unit of every response, one without a label standing as a unit of its own."""
    names = text_label(parts, "unit")
    if names is None:
        return None
    responses = np.concatenate([part["response"].values.astype(str) for part in parts])
    return np.where(names == NOT_LABELLED, responses, names)
