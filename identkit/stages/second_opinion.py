"""Modes found without a frequency-domain step beside those of the fits: where they disagree."""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.grids import Gridded, datasets
from identkit.methods.subspace_opinion import SubspaceModes, disagrees

_NAMES = ("frequency", "damping_ratio", "frequency_error")


def with_opinions(data: xr.Dataset, opinions: Sequence[SubspaceModes | str]) -> xr.Dataset:
    """Return responses with the second opinion on each, NaN beyond its number of modes."""
    found = [each for each in opinions if isinstance(each, SubspaceModes)]
    if not found:
        return data.assign(second_opinion=("response", [str(each) for each in opinions]))
    most = max(each.frequency.size for each in found)
    tables = np.full((len(_NAMES), len(opinions), most), np.nan)
    for k, each in enumerate(opinions):
        if isinstance(each, SubspaceModes):
            for table, name in zip(tables, _NAMES, strict=True):
                values = getattr(each, name)
                table[k, : values.size] = values
    words = [each if isinstance(each, str) else "found" for each in opinions]
    variables = {
        f"subspace_{name}": (("response", "subspace_mode"), table)
        for name, table in zip(_NAMES, tables, strict=True)
    }
    return data.assign(second_opinion=("response", words)).assign(variables)


def disagreements(responses: Gridded, modes: xr.Dataset) -> list[tuple[str, str, float, float]]:
    """Return (response, mode, fitted Hz, nearest of the second opinion, Hz) of contradictions.

    Parameters
    ----------
    responses
        With the second opinions of the estimate stage; nothing is returned without them.
    modes
        Paired modes with the standard errors of their frequencies.
    """
    rows = []
    at = {str(name): k for k, name in enumerate(modes["response"].values)}
    for part in datasets(responses):
        if "subspace_frequency" not in part:
            continue
        for k, name in enumerate(part["response"].values):
            opinion = _opinion(part, k)
            row = modes.isel(response=at[str(name)])
            there = np.isfinite(row["modal_frequency"].values)
            frequency = row["modal_frequency"].values[there]
            off = disagrees(
                frequency,
                row["damping_ratio"].values[there],
                row["modal_frequency_standard_error"].values[there],
                opinion,
            )
            for mode, value in zip(row["mode"].values[there][off], frequency[off], strict=True):
                nearest = opinion.frequency[np.argmin(np.abs(opinion.frequency - value))]
                rows.append((str(name), str(mode), float(value), float(nearest)))
    return rows


def _opinion(part: xr.Dataset, k: int) -> SubspaceModes:
    values = [part[f"subspace_{name}"].values[k] for name in _NAMES]
    there = np.isfinite(values[0])
    return SubspaceModes(*(each[there] for each in values))
