"""Adding results folders to the history: all of them, or none."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from sqlalchemy import Connection, insert, select

from identkit.errors import InputError, Problem
from identkit.history import tables
from identkit.history.entries import Entry, Folder, file_digest
from identkit.history.store import ROWS_AT_ONCE, Store, insert_rows
from identkit.methods.mode_assignment import UNPAIRED, assign_modes, pairing_cost
from identkit.plant_set.files import load_set
from identkit.plant_set.plant_document import plant_to

CORRECTIONS = (
    "temperature_slope",
    "temperature_slope_standard_error",
    "position_slope",
    "position_slope_standard_error",
    "unit_deviation",
    "head_deviation",
    "residual_deviation",
)
# How far a population may move and its modes still be the same: log frequency, log damping,
# relative residue.
_SAME_MODE = {"modal_frequency": 0.02, "damping_ratio": 0.5, "residue": 0.5}
_UNPAIRED_COST = 8.0


@dataclass(frozen=True)
class Added:
    """What was added: the numbers of the additions, and what must be said about them."""

    numbers: tuple[int, ...] = ()
    notes: tuple[str, ...] = ()


def add_folders(store: Store, folders: Sequence[Folder], version: str) -> Added:
    """Add every measurement of the folders in one transaction.

    Parameters
    ----------
    store
        The history.
    folders
        Read by `read_folder`.
    version
        Of the program, to be recorded.

    Returns
    -------
    Added
        Numbers of the additions, and what a reader should know: modes that could not be matched.

    Raises
    ------
    InputError
        If any measurement stands in the history already, or twice in the folders; nothing is
        written then.
    """
    _refuse_doubles(folders)
    notes, numbers = [], []
    with store.transaction() as connection:
        _refuse_known(store, connection, folders)
        for folder in folders:
            if not store.rule(connection, "reference_temperature"):
                _set_corrections(store, connection, folder)
            names, said = _mode_names(connection, folder.population)
            numbers.append(_insert(connection, folder, names, version, said))
            notes += [f"{folder.path}: {sentence}" for sentence in said]
    return Added(tuple(numbers), tuple(notes))


def release_set(store: Store, path: Path) -> str:
    """Make a set file the released one of the history; return its digest.

    Raises
    ------
    InputError
        If the file is missing or no plant set.
    """
    load_set(path)
    digest = file_digest(path)
    with store.transaction() as connection:
        known = select(tables.PLANT_SET.c.digest).where(tables.PLANT_SET.c.digest == digest)
        if connection.execute(known).scalar() is None:
            row = {
                "digest": digest,
                "name": path.name,
                "suffix": path.suffix,
                "content": path.read_bytes(),
                "released_at": _now(),
            }
            connection.execute(insert(tables.PLANT_SET).values(**row))
        store.set_rule(connection, "released_set", digest)
    return digest


def _refuse_doubles(folders: Sequence[Folder]) -> None:
    seen: dict[tuple[str, str, str], Path] = {}
    for folder in folders:
        for entry in folder.entries:
            key = (entry.response, entry.measured_at, entry.digest)
            if key in seen:
                found = f"{entry.response}, which {seen[key]} holds too"
                raise InputError(Problem(str(folder.path), found, "every measurement once"))
            seen[key] = folder.path


def _refuse_known(store: Store, connection: Connection, folders: Sequence[Folder]) -> None:
    known = tables.MEASUREMENT.c
    for folder in folders:
        keys = {(e.response, e.measured_at, e.digest): e for e in folder.entries}
        names = sorted({e.response for e in folder.entries})
        repeated = []
        for start in range(0, len(names), ROWS_AT_ONCE // 4):
            some = names[start : start + ROWS_AT_ONCE // 4]
            rows = connection.execute(
                select(known.response, known.measured_at, known.digest).where(
                    known.response.in_(some)
                )
            )
            repeated += [tuple(row) for row in rows if tuple(row) in keys]
        if repeated:
            first, count = str(repeated[0][0]), len(repeated)
            found = f"{first} and {count - 1} more" if count > 1 else first
            found += f" of its {len(keys)} measurements in {store.name} already"
            expected = "measurements that are new to the history; nothing was added"
            raise InputError(Problem(str(folder.path), found, expected))


def _set_corrections(store: Store, connection: Connection, folder: Folder) -> None:
    population = folder.population
    store.set_rule(
        connection, "reference_temperature", repr(float(population.attrs["reference_temperature"]))
    )
    position = [e.labels["position"] for e in folder.entries if "position" in e.labels]
    known = [float(p) for p in position if isinstance(p, float | int)]
    if known:
        store.set_rule(connection, "reference_position", repr(float(np.median(known))))
    corrections, heads = [], []
    for mode, quantity in _pairs(population):
        one = population.sel(mode=mode, quantity=quantity)
        row: dict[str, Any] = {"mode": mode, "quantity": quantity}
        row["value"] = float(one["population_value"])
        corrections.append(row | {name: _or_none(float(one[name])) for name in CORRECTIONS})
        heads += [
            {"mode": mode, "quantity": quantity, "head": str(head), "value": float(value)}
            for head, value in zip(population["head"].values, one["head_value"].values, strict=True)
            if np.isfinite(value)
        ]
    insert_rows(connection, tables.CORRECTION, corrections)
    insert_rows(connection, tables.HEAD_VALUE, heads)


def _pairs(population: xr.Dataset) -> list[tuple[str, str]]:
    value = population["population_value"].transpose("mode", "quantity").values
    return [
        (str(mode), str(quantity))
        for m, mode in enumerate(population["mode"].values)
        for q, quantity in enumerate(population["quantity"].values)
        if np.isfinite(value[m, q])
    ]


def _mode_names(connection: Connection, population: xr.Dataset) -> tuple[dict[str, str], list[str]]:
    """Return the history's name of every mode of a folder, by assignment, and what failed."""
    stored: dict[str, dict[str, float]] = {}
    for row in connection.execute(select(tables.CORRECTION)).mappings():
        stored.setdefault(row["mode"], {})[row["quantity"]] = row["value"]
    ours = list(stored)
    theirs = [str(mode) for mode in population["mode"].values]
    quantities = [q for q in _SAME_MODE if q in population["quantity"].values]
    distance = np.full((len(theirs), len(ours), len(quantities)), np.nan)
    for q, quantity in enumerate(quantities):
        here = population["population_value"].sel(quantity=quantity).values
        there = np.array([stored[mode].get(quantity, np.nan) for mode in ours])
        ratio = here[:, None] / there[None, :]
        apart = ratio - 1.0 if quantity == "residue" else np.log(ratio)
        distance[:, :, q] = apart / _SAME_MODE[quantity]
    cost = pairing_cost(distance, np.ones_like(distance))
    pairs = assign_modes(cost, _UNPAIRED_COST)
    names = {mode: ours[k] for mode, k in zip(theirs, pairs, strict=True) if k != UNPAIRED}
    said = [
        f"mode {mode} is none of the modes of the history and is not charted"
        for mode in theirs
        if mode not in names
    ]
    lost = [mode for mode in ours if mode not in names.values()]
    said += [f"mode {mode} of the history is not among its modes" for mode in lost]
    return names, said


def _insert(
    connection: Connection,
    folder: Folder,
    names: Mapping[str, str],
    version: str,
    notes: Sequence[str],
) -> int:
    addition = connection.execute(
        insert(tables.ADDITION).values(
            added_at=_now(), folder=folder.path.name, version=version, notes="\n".join(notes)
        )
    ).inserted_primary_key
    assert addition is not None
    estimates = []
    for entry in folder.entries:
        row = _measurement(entry, folder.set_digest) | {"addition_id": addition[0]}
        key = connection.execute(insert(tables.MEASUREMENT).values(**row)).inserted_primary_key
        assert key is not None
        estimates += [
            {
                "measurement_id": key[0],
                "mode": names[e.mode],
                "quantity": e.quantity,
                "value": e.value,
                "standard_error": _or_none(e.standard_error),
            }
            for e in entry.estimates
            if e.mode in names
        ]
    insert_rows(connection, tables.ESTIMATE, estimates)
    return int(addition[0])


def _measurement(entry: Entry, set_digest: str) -> dict[str, Any]:
    labels = dict(entry.labels)
    plant, parameters, matrix = "", "", b""
    if entry.plant is not None:
        document = plant_to(entry.plant)
        document.pop("covariance", None)
        plant = json.dumps(document)
    if entry.plant is not None and entry.plant.covariance is not None:
        covariance = entry.plant.covariance
        parameters = json.dumps(list(covariance.parameters))
        lower = covariance.matrix[np.tril_indices(len(covariance.parameters))]
        matrix = lower.astype("<f8").tobytes()
    return {
        "response": entry.response,
        "measured_at": entry.measured_at,
        "digest": entry.digest,
        "unit": str(labels.get("unit", entry.response)),
        "lot": str(labels.get("lot", "")),
        "head": str(labels.get("head", "")),
        "temperature": _number(labels.get("temperature")),
        "position": _number(labels.get("position")),
        "labels": json.dumps(labels),
        "excluded": entry.excluded,
        "folder_reach": _or_none(entry.folder_reach),
        "folder_set": set_digest,
        "plant": plant,
        "covariance_parameters": parameters,
        "covariance": matrix,
    }


def _number(value: str | float | None) -> float | None:
    return float(value) if isinstance(value, float | int) else None


def _or_none(value: float) -> float | None:
    return value if np.isfinite(value) else None


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")
