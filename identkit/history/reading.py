"""The history as labelled data: measurements with their estimates, and how to correct them."""

import json
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from sqlalchemy import Connection, select

from identkit.history import tables
from identkit.history.adding import CORRECTIONS
from identkit.history.store import Store, insert_rows
from identkit.plant_set.fields import Covariance, FittedPlant
from identkit.plant_set.files import load_set
from identkit.plant_set.model import PlantSet
from identkit.plant_set.node import Node
from identkit.plant_set.plant_document import plant_from
from identkit.plant_set.reach import reach_of_plants


@dataclass(frozen=True, eq=False)
class History:
    """Everything the charts need.

    Attributes
    ----------
    measurements
        Dims measurement, mode, quantity: value, standard_error; labels and reach along
        measurement.
    correction
        Dims mode, quantity, head: slopes, deviations, head_value.
    set_name
        Of the released set; empty where there is none.
    notes
        What was said when folders were added.
    """

    measurements: xr.Dataset
    correction: xr.Dataset
    set_name: str
    notes: tuple[str, ...]


def read_history(store: Store) -> History:
    """Read the whole history as one consistent state."""
    with store.transaction() as connection:
        digest = store.rule(connection, "released_set")
        correction = _correction(store, connection)
        measurements = _measurements(connection, correction, digest)
        name = select(tables.PLANT_SET.c.name).where(tables.PLANT_SET.c.digest == digest)
        set_name = str(connection.execute(name).scalar() or "")
        said = connection.execute(select(tables.ADDITION.c.notes)).scalars()
        notes = tuple(line for text in said for line in text.splitlines())
    return History(measurements, correction, set_name, notes)


def fill_reach(store: Store) -> None:
    """Compute the reach of every stored plant in the released set where it is not known yet."""
    with store.transaction() as connection:
        digest = store.rule(connection, "released_set")
        found = _missing_reach(connection, digest) if digest else {}
        contents = _stored_set(connection, digest) if found else None
    if contents is None:
        return
    reach = reach_of_plants(contents, list(found.values()))
    excluded = {item.label for item in contents.certificate.measured.excluded}
    made_from = {_identity(p) for p in contents.plants if p.response not in excluded}
    rows = {
        key: {
            "measurement_id": key,
            "set_digest": digest,
            "value": float(value),
            "frequency": float(hertz) if np.isfinite(hertz) else None,
            "in_set": int(_identity(plant) in made_from),
        }
        for (key, plant), value, hertz in zip(
            found.items(), reach.value, reach.frequency, strict=True
        )
    }
    with store.transaction() as connection:  # another writer may have been faster
        missing = _missing_reach(connection, digest)
        insert_rows(connection, tables.REACH, [row for key, row in rows.items() if key in missing])


def _missing_reach(connection: Connection, digest: str) -> dict[int, FittedPlant]:
    measured, reach = tables.MEASUREMENT.c, tables.REACH.c
    known = select(reach.measurement_id).where(reach.set_digest == digest)
    rows = connection.execute(
        select(tables.MEASUREMENT).where(measured.plant != "", measured.id.not_in(known))
    ).mappings()
    return {row["id"]: stored_plant(row) for row in rows}


def _identity(plant: FittedPlant) -> tuple[str, str, float]:
    frequency = float(plant.modal_frequency.sum())
    return plant.response, str(plant.labels.get("measured_at", "")), round(frequency, 3)


def stored_plant(row: Any) -> FittedPlant:
    """Return the fitted plant of a row of the measurement table."""
    document = json.loads(row["plant"])
    feedthrough = document["modal_parameters"]["feedthrough"]
    plant = plant_from(Node(document, "history"), (len(feedthrough), len(feedthrough[0])))
    if not row["covariance_parameters"]:
        return plant
    names = tuple(json.loads(row["covariance_parameters"]))
    matrix = np.zeros((len(names), len(names)))
    matrix[np.tril_indices(len(names))] = np.frombuffer(row["covariance"], dtype="<f8")
    whole = matrix + np.tril(matrix, -1).T
    return FittedPlant(**{**vars(plant), "covariance": Covariance(names, whole)})


def _stored_set(connection: Connection, digest: str) -> PlantSet | None:
    kept = tables.PLANT_SET
    row = connection.execute(select(kept).where(kept.c.digest == digest)).mappings().first()
    if row is None:
        return None
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / f"set{row['suffix']}"
        path.write_bytes(row["content"])
        return load_set(path)


def _correction(store: Store, connection: Connection) -> xr.Dataset:
    rows = list(connection.execute(select(tables.CORRECTION)).mappings())
    heads = list(connection.execute(select(tables.HEAD_VALUE)).mappings())
    modes = list(dict.fromkeys(str(row["mode"]) for row in rows))
    quantities = list(dict.fromkeys(str(row["quantity"]) for row in rows))
    names = sorted({str(row["head"]) for row in heads})
    place = {(m, q): (i, j) for i, m in enumerate(modes) for j, q in enumerate(quantities)}
    columns = {
        name: np.full((len(modes), len(quantities)), np.nan) for name in ("value", *CORRECTIONS)
    }
    head_value = np.full((len(modes), len(quantities), len(names)), np.nan)
    for row in rows:
        for name, column in columns.items():
            column[place[row["mode"], row["quantity"]]] = np.nan if row[name] is None else row[name]
    for row in heads:
        head_value[(*place[row["mode"], row["quantity"]], names.index(row["head"]))] = row["value"]
    dims = ("mode", "quantity")
    attrs = {}
    for name in ("reference_temperature", "reference_position", "run_length", "baseline_units"):
        value = store.rule(connection, name)
        attrs[name] = float(value) if value else float("nan")
    return xr.Dataset(
        {
            **{name: (dims, column) for name, column in columns.items()},
            "head_value": ((*dims, "head"), head_value),
        },
        coords={"mode": modes, "quantity": quantities, "head": names},
        attrs=attrs,
    )


def _measurements(connection: Connection, correction: xr.Dataset, digest: str) -> xr.Dataset:
    wanted = [c for c in tables.MEASUREMENT.c if c.name not in ("plant", "covariance")]
    rows = list(connection.execute(select(*wanted).order_by(tables.MEASUREMENT.c.id)).mappings())
    index = {row["id"]: at for at, row in enumerate(rows)}
    modes = {str(m): at for at, m in enumerate(correction["mode"].values)}
    quantities = {str(q): at for at, q in enumerate(correction["quantity"].values)}
    shape = (len(rows), len(modes), len(quantities))
    value, error = np.full(shape, np.nan), np.full(shape, np.nan)
    for row in connection.execute(select(tables.ESTIMATE)).mappings():
        if row["quantity"] in quantities:
            at = (index[row["measurement_id"]], modes[row["mode"]], quantities[row["quantity"]])
            value[at] = row["value"]
            error[at] = np.nan if row["standard_error"] is None else row["standard_error"]
    dims = ("measurement", "mode", "quantity")
    labels = {
        name: ("measurement", np.array([str(row[name]) for row in rows], dtype=str))
        for name in ("response", "measured_at", "unit", "lot", "head", "excluded", "labels")
    }
    numbers: dict[str, Any] = {
        name: ("measurement", np.array([_float(row[name]) for row in rows], dtype=float))
        for name in ("temperature", "position")
    }
    numbers["addition"] = (
        "measurement",
        np.array([row["addition_id"] for row in rows], dtype=np.int64),
    )
    return xr.Dataset(
        {"value": (dims, value), "standard_error": (dims, error)}
        | _reach_columns(connection, rows, digest),
        coords={
            "measurement": [row["id"] for row in rows],
            "mode": correction["mode"].values,
            "quantity": correction["quantity"].values,
            **labels,
            **numbers,
        },
    )


def _reach_columns(connection: Connection, rows: list[Any], digest: str) -> dict[str, Any]:
    """Return reach in the released set; without one that in the folders' own, if it is one set."""
    reach = np.full(len(rows), np.nan)
    frequency = np.full(len(rows), np.nan)
    in_set = np.ones(len(rows), dtype=bool)
    if digest:
        kept = tables.REACH
        stored = connection.execute(select(kept).where(kept.c.set_digest == digest)).mappings()
        known = {row["measurement_id"]: row for row in stored}
        for at, row in enumerate(rows):
            if row["id"] in known:
                reach[at] = known[row["id"]]["value"]
                frequency[at] = _float(known[row["id"]]["frequency"])
                in_set[at] = bool(known[row["id"]]["in_set"])
    elif len({row["folder_set"] for row in rows if row["folder_reach"] is not None}) == 1:
        reach = np.array([_float(row["folder_reach"]) for row in rows])
    return {
        "reach": ("measurement", reach),
        "reach_frequency": ("measurement", frequency),
        "in_set": ("measurement", in_set),
    }


def _float(value: float | None) -> float:
    return float("nan") if value is None else float(value)
