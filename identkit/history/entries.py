"""A results folder as entries of the history: what was measured, and what its fits say."""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import load
from identkit.plant_set.fields import FittedPlant
from identkit.plant_set.plant_document import plant_to
from identkit.stages.mode_tables import channel_name
from identkit.stages.set_plants import labels_of, set_plants

NEEDED = ("modes.nc", "population.nc")
SET_FILES = ("set.h5", "set.json")


@dataclass(frozen=True)
class Estimate:
    """One estimate of one mode, natural units; NaN error where it is not known."""

    mode: str
    quantity: str
    value: float
    standard_error: float


@dataclass(frozen=True, eq=False)
class Entry:
    """One measurement.

    Attributes
    ----------
    response, measured_at, digest
        What makes it one: name, date as given (empty where there is none) and SHA-256 of the
        measured file, or of its fit where the file is not known.
    labels
        As measured; a missing one is absent.
    excluded
        Why the folder's set leaves it out; empty where it does not.
    folder_reach
        Against the folder's own set; NaN where there is none.
    plant
        The fitted plant, covariance included; None without a usable fit.
    estimates
        One per mode of the population and quantity that was found.
    """

    response: str
    measured_at: str
    digest: str
    labels: Mapping[str, str | float]
    excluded: str
    folder_reach: float
    plant: FittedPlant | None
    estimates: tuple[Estimate, ...]


@dataclass(frozen=True, eq=False)
class Folder:
    """A results folder.

    Attributes
    ----------
    path
        Where it stands.
    entries
        Its measurements.
    population
        As described by the population stage.
    set_file
        The set it exported, or None.
    set_digest
        SHA-256 of that file; empty without one.
    """

    path: Path
    entries: tuple[Entry, ...]
    population: xr.Dataset
    set_file: Path | None
    set_digest: str


def read_folder(path: Path) -> Folder:
    """Read a results folder; nothing in it is changed.

    Parameters
    ----------
    path
        Results folder of a study that ran up to population at least.

    Raises
    ------
    InputError
        If a file is missing or damaged.
    """
    for name in NEEDED:
        if not (path / name).is_file():
            found = f"no {name}" if path.is_dir() else "no such folder"
            raise InputError(Problem(str(path), found, "a results folder run up to population"))
    modes, population = load(path / "modes.nc"), load(path / "population.nc")
    assert isinstance(modes, xr.Dataset)
    assert isinstance(population, xr.Dataset)
    set_file = next((path / name for name in SET_FILES if (path / name).is_file()), None)
    digest = "" if set_file is None else file_digest(set_file)
    return Folder(path, tuple(_entries(path, modes)), population, set_file, digest)


def file_digest(path: Path) -> str:
    """Return the SHA-256 of a file."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _entries(path: Path, modes: xr.Dataset) -> list[Entry]:
    plants = {plant.response: plant for plant in set_plants(modes)[0]}
    digests, audited = _input_digests(path), _audited(path)
    columns = _columns(modes)
    entries = []
    for row, labels in enumerate(labels_of(modes)):
        name = str(modes["response"].values[row])
        plant = plants.get(name)
        excluded, reach = audited.get(name, ("", float("nan")))
        digest = digests.get(str(labels.get("source", ""))) or _fit_digest(plant, name)
        measured_at = str(labels.get("measured_at", ""))
        estimates = _estimates(columns, row) if plant is not None else ()
        entries.append(Entry(name, measured_at, digest, labels, excluded, reach, plant, estimates))
    return entries


def _input_digests(path: Path) -> dict[str, str]:
    """Return the SHA-256 of every measured file by its name, as the run recorded them."""
    try:
        record = json.loads((path / "run.json").read_text(encoding="utf-8"))
        return {str(k): str(v["sha256"]) for k, v in record["inputs"].items()}
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return {}


def _audited(path: Path) -> dict[str, tuple[str, float]]:
    """Return by response why it is excluded, and its reach in the folder's own set."""
    if not (path / "audit.nc").is_file():
        return {}
    table = load(path / "audit.nc")
    assert isinstance(table, xr.Dataset)
    names, reach = table["response"].values.astype(str), table["fit_reach"].values
    out = table["excluded"].values.astype(bool)
    reason = table["reason"].values.astype(str)
    return {
        str(name): ((str(reason[k]) or "left out of the set") if out[k] else "", float(reach[k]))
        for k, name in enumerate(names)
    }


def _fit_digest(plant: FittedPlant | None, name: str) -> str:
    content: Any = name if plant is None else plant_to(replace(plant, labels={}))
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


def _columns(modes: xr.Dataset) -> dict[str, tuple[Any, Any]]:
    """Return (responses, modes) value and standard error of every quantity of population modes."""
    belongs = modes["mode_in_population"].values.astype(bool)
    chosen = modes.isel(mode=np.flatnonzero(belongs))
    columns: dict[str, tuple[Any, Any]] = {"mode": (chosen["mode"].values.astype(str), None)}
    for name in ("modal_frequency", "damping_ratio"):
        found = [
            chosen[f"{name}{end}"].transpose("response", "mode").values
            for end in ("", "_standard_error")
        ]
        columns[name] = (found[0], found[1])
    dims = ("response", "mode", "output", "input")
    value, error = (
        chosen[f"residue{end}"].transpose(*dims).values for end in ("", "_standard_error")
    )
    shape = value.shape[2:]
    for o, i in np.ndindex(*shape):
        columns[channel_name("residue", shape, o, i)] = (value[:, :, o, i], error[:, :, o, i])
    return columns


def _estimates(columns: Mapping[str, tuple[Any, Any]], row: int) -> tuple[Estimate, ...]:
    names = columns["mode"][0]
    return tuple(
        Estimate(str(mode), quantity, float(value[row, k]), float(error[row, k]))
        for k, mode in enumerate(names)
        for quantity, (value, error) in columns.items()
        if quantity != "mode" and np.isfinite(value[row, k])
    )
