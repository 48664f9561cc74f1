"""Where documents go and come from: format by name or suffix, checked on the way in and out."""

from dataclasses import replace
from pathlib import Path
from typing import Any

from identkit.errors import InputError, Problem
from identkit.plant_set.document import from_document, to_document
from identkit.plant_set.fields import LISTED_AT_MOST, FittedPlant, PlantSetFields
from identkit.plant_set.hdf5_file import read_hdf5, write_hdf5
from identkit.plant_set.json_file import read_json, write_json
from identkit.plant_set.plant_columns import plants_from_columns, plants_to_columns
from identkit.plant_set.plant_document import plant_to
from identkit.plant_set.schema import check_schema

_FORMAT_OF_SUFFIX = {".json": "json", ".h5": "hdf5", ".hdf5": "hdf5"}


def format_of(path: Path, format: str | None = None) -> str:
    """Return "json" or "hdf5".

    Raises
    ------
    InputError
        If neither the name nor the suffix says which.
    """
    chosen = _FORMAT_OF_SUFFIX.get(path.suffix.lower()) if format is None else format
    if chosen not in ("json", "hdf5"):
        found = repr(format) if format is not None else f"the suffix {path.suffix!r}"
        raise InputError(Problem(str(path), found, "json (.json) or hdf5 (.h5)"))
    return chosen


def write_fields(contents: PlantSetFields, path: str | Path, format: str | None = None) -> None:
    """Write a set; JSON lists only the plants that set the bound, HDF5 all.

    Raises
    ------
    InputError
        If a field breaks the format; nothing is written then.
    """
    target = Path(path)
    if format_of(target, format) == "json":
        listed = replace(contents, plants=plants_that_set_the_bound(contents))
        write_json(_checked(listed, str(target)), target)
        return
    document = _checked(replace(contents, plants=contents.plants[:LISTED_AT_MOST]), str(target))
    shape = (len(contents.outputs), len(contents.inputs))
    columns = plants_to_columns(contents.plants, shape)
    plants_from_columns(columns, str(target), shape)
    write_hdf5(document, columns, target)


def read_fields(path: str | Path) -> PlantSetFields:
    """Return the fields of a set file, checked against the schema and for shapes."""
    target = Path(path)
    if format_of(target) == "json":
        document = read_json(target)
        check_schema(document, str(target))
        return from_document(document, str(target))
    document, columns = read_hdf5(target)
    place = str(target)
    check_schema({**document, "plants": []}, place)
    contents = from_document({**document, "plants": []}, place)
    shape = (len(contents.outputs), len(contents.inputs))
    plants = plants_from_columns(columns, place, shape)
    check_schema({**document, "plants": [plant_to(p) for p in plants[:LISTED_AT_MOST]]}, place)
    return replace(contents, plants=plants)


def plants_that_set_the_bound(contents: PlantSetFields) -> tuple[FittedPlant, ...]:
    """Return the plants that set the radius somewhere, those that set it most often first to stay.

    The plants keep their order in the file; at most 200 are kept, and always the one that reaches
    farthest.
    """
    times: dict[str, float] = {}
    for label in contents.radii.set_by:
        times[label] = times.get(label, 0.0) + 1.0
    for line in contents.attribution:
        times.setdefault(line.label, 0.5)
    if contents.plants:
        farthest = max(contents.plants, key=lambda plant: plant.reach)
        times[farthest.response] = float("inf")
    setting = [plant for plant in contents.plants if plant.response in times]
    ranked = sorted(setting, key=lambda plant: -times[plant.response])[:LISTED_AT_MOST]
    kept = {plant.response for plant in ranked}
    return tuple(plant for plant in setting if plant.response in kept)


def _checked(contents: PlantSetFields, place: str) -> dict[str, Any]:
    """Return the document, checked with the schema and with the reader, which knows of shapes."""
    document = to_document(contents)
    check_schema(document, place)
    from_document(document, place)
    return document
