"""Plant set documents in HDF5: the same tree as the JSON file, the plants as columns.

Objects are groups, numbers and lists of numbers are datasets, texts are UTF-8 datasets. Lists of
objects and whatever has no other home are JSON text in a dataset marked ``encoding = "json"``.
Plants are columns (`plant_columns`), so that a hundred thousand of them stay small and fast.
"""

import json
from importlib import import_module
from pathlib import Path
from typing import Any

import numpy as np

from identkit.atomic import replacing
from identkit.errors import InputError, Problem
from identkit.plant_set.plant_columns import Columns

# What the library raises on files that are cut short or damaged, depending on where.
_DAMAGE = (OSError, RuntimeError, ValueError, KeyError, TypeError, AttributeError)
_NOT_HDF5 = "an HDF5 file of format identkit-plant-set/1"


def write_hdf5(document: dict[str, Any], columns: Columns, path: Path) -> None:
    """Replace `path` by the document, its plants given as columns."""
    library = import_module("h5py")
    with replacing(path) as temporary, library.File(temporary, "w") as file:
        for name, value in document.items():
            if name != "plants":
                _write(file, name, value)
        plants = file.create_group("plants")
        for name, column in columns.items():
            plants.create_dataset(_link(name), data=_storable(column))


def read_hdf5(path: Path) -> tuple[dict[str, Any], Columns]:
    """Return the document without its plants, and those as columns.

    Raises
    ------
    InputError
        If the file is not there, is not HDF5, is cut short, or holds numbers that are not finite.
    """
    library = import_module("h5py")
    if not path.is_file():
        raise InputError(Problem(str(path), "no file", "a set file"))
    try:
        with library.File(path, "r") as file:
            document = {name: _read(file[name], path) for name in file if name != "plants"}
            columns = _read_columns(file["plants"]) if "plants" in file else {}
    except _DAMAGE as error:
        raise InputError(Problem(str(path), f"unreadable data ({error})", _NOT_HDF5)) from error
    return document, columns


def _link(name: str) -> str:
    """Return a name as HDF5 can carry it: a slash or a lone dot would mean a path there."""
    quoted = name.replace("%", "%25").replace("/", "%2F").replace("\x00", "%00")
    return quoted.replace(".", "%2E") if set(quoted) == {"."} else quoted


def _name(link: str) -> str:
    """Return the name behind `_link`."""
    plain = link.replace("%2E", ".").replace("%00", "\x00").replace("%2F", "/")
    return plain.replace("%25", "%")


def _write(parent: Any, name: str, value: Any) -> None:
    if isinstance(value, dict) and name != "settings":
        group = parent.create_group(name)
        for key, content in value.items():
            _write(group, _link(key), content)
    elif isinstance(value, str):
        parent.create_dataset(name, data=value)
    elif _is_numeric(value):
        parent.create_dataset(name, data=np.asarray(value))
    else:
        item = parent.create_dataset(name, data=json.dumps(value, allow_nan=False))
        item.attrs["encoding"] = "json"


def _is_numeric(value: Any) -> bool:
    """Tell whether a value is a number, or a rectangular list of them that is not empty."""
    if isinstance(value, bool | int | float):
        return True
    if not isinstance(value, list) or not value:
        return False
    try:
        array = np.asarray(value)
    except ValueError:
        return False
    return array.dtype.kind == "f" and array.size > 0


def _read(item: Any, path: Path) -> Any:
    if hasattr(item, "keys"):
        return {_name(key): _read(item[key], path) for key in item}
    value = item[()]
    if isinstance(value, bytes):
        text = value.decode("utf-8")
        return _parsed(text, item, path) if item.attrs.get("encoding") == "json" else text
    plain = value.tolist()
    if isinstance(value, np.ndarray | np.floating) and not np.isfinite(value).all():
        field = item.name.strip("/").replace("/", ".")
        raise InputError(
            Problem(f"{path}, field {field}", "a number that is not finite", "numbers")
        )
    return plain


def _parsed(text: str, item: Any, path: Path) -> Any:
    try:
        return json.loads(text)
    except json.JSONDecodeError as error:
        field = item.name.strip("/").replace("/", ".")
        raise InputError(Problem(f"{path}, field {field}", "broken text", "JSON text")) from error


def _storable(column: Any) -> Any:
    if column.dtype.kind == "U":
        return np.asarray(column, dtype=object) if column.size else np.zeros(0, dtype="S1")
    return column


def _read_columns(group: Any) -> Columns:
    columns: Columns = {}
    for name in group:
        values = group[name][()]
        if values.dtype.kind in "OS":
            values = np.array([item.decode("utf-8") for item in values.tolist()], dtype=str)
        columns[_name(name)] = values
    return columns
