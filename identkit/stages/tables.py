"""CSV tables of fits, modes and population, for people and spreadsheets."""

from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from identkit.atomic import replacing
from identkit.outcomes import slug

LABELS = ("unit", "head", "temperature", "position", "lot", "measured_at", "source")
_FIT_COLUMNS = {
    "delay": "delay_s",
    "base_frequency": "base_frequency_hz",
    "base_damping_ratio": "base_damping_ratio",
    "base_residue": "base_residue",
    "base_gain": "base_gain",
    "feedthrough": "feedthrough",
    "noise_ratio": "noise_ratio",
}
_MODE_COLUMNS = {
    "modal_frequency": "modal_frequency_hz",
    "modal_frequency_standard_error": "modal_frequency_hz_standard_error",
    "damping_ratio": "damping_ratio",
    "damping_ratio_standard_error": "damping_ratio_standard_error",
    "residue": "residue",
    "residue_standard_error": "residue_standard_error",
    "residue_rate": "residue_rate",
    "mode_significance": "significance",
}


def fits_table(fits: xr.Dataset) -> pd.DataFrame:
    """Return one row per response: labels, delay, base, feedthrough, noise ratio, outcome.

    Matrix plants have one row per response and channel, with ``output`` and ``input``.
    """
    names = [name for name in _FIT_COLUMNS if name in fits]
    frame = _long(fits[names], ("response", "output", "input"), _channels(fits))
    table = _labelled(fits, frame).rename(columns=_FIT_COLUMNS)
    outcome = pd.Series(fits["fit_outcome"].values, index=fits["response"].values)
    table["outcome"] = [slug(int(code)) for code in table["response"].map(outcome)]
    return table


def modes_table(modes: xr.Dataset) -> pd.DataFrame:
    """Return one row per response and mode; extra modes only where they were found.

    Matrix plants have one row per response, mode and channel, with ``output`` and ``input``.
    """
    names = [name for name in _MODE_COLUMNS if name in modes]
    dims = ("response", "mode", "output", "input")
    frame = _long(modes[[*names, "mode_outcome"]], dims, _channels(modes))
    if "residue_rate" not in frame:
        frame["residue_rate"] = np.where(frame["residue"].isna(), np.nan, 0.0)
    belongs = pd.Series(modes["mode_in_population"].values, index=modes["mode"].values)
    shown = frame["mode"].map(belongs) | frame["modal_frequency"].notna()
    frame = frame[shown].reset_index(drop=True)
    outcome = [slug(int(code)) for code in frame.pop("mode_outcome")]
    ordered = frame[
        [*(c for c in ("response", "mode", "output", "input") if c in frame), *_MODE_COLUMNS]
    ]
    table = _labelled(modes, ordered.rename(columns=_MODE_COLUMNS))
    table["outcome"] = outcome
    return table


def population_table(population: xr.Dataset) -> pd.DataFrame:
    """Return one row per mode and quantity, then the base, feedthrough and delay."""
    statistics = [
        name for name in population.data_vars if population[name].dims == ("mode", "quantity")
    ]
    counts = ["responses_found", "responses_missing", "responses_shifted"]
    frame = _long(population[statistics], ("mode", "quantity"), True)
    for name in counts:
        found = pd.Series(population[name].values, index=population["mode"].values)
        frame[name] = frame["mode"].map(found).astype("Int64")
    base = population[[f"base_{name}" for name in statistics]].to_dataframe().reset_index()
    base.columns = pd.Index(["quantity", *statistics])
    base.insert(0, "mode", "base")
    return pd.concat([frame, base], ignore_index=True)


def write_table(table: pd.DataFrame, path: Path | str) -> None:
    """Write a table as UTF-8 CSV with every digit, replacing an older file whole."""
    with replacing(path) as temporary:
        table.to_csv(temporary, index=False, lineterminator="\n", encoding="utf-8")


def _channels(data: xr.Dataset) -> bool:
    return data.sizes.get("output", 1) * data.sizes.get("input", 1) > 1


def _long(data: xr.Dataset, dims: tuple[str, ...], keep_channels: bool) -> pd.DataFrame:
    """Return one row per combination of `dims` that stand in the data."""
    bare = data.drop_vars([c for c in data.coords if c not in data.dims])
    present = [d for d in dims if d in bare.dims]
    frame = bare.to_dataframe(dim_order=present).reset_index()
    if not keep_channels:
        frame = frame.drop(columns=[c for c in ("output", "input") if c in frame])
    return frame


def _labelled(data: xr.Dataset, frame: pd.DataFrame) -> pd.DataFrame:
    """Insert the labels of each response after its name, the known labels first."""
    on_response = [str(c) for c in data.coords if data[c].dims == ("response",)]
    names = [n for n in LABELS if n in on_response]
    names += [n for n in on_response if n not in names and n != "response"]
    result = frame.copy()
    for place, name in enumerate(names, start=1):
        lookup = pd.Series(data[name].values, index=data["response"].values)
        result.insert(place, name, result["response"].map(lookup))
    return result
