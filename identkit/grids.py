"""Labelled data on one frequency grid or several, in memory and in NetCDF-4 files.

Responses that share one grid are a Dataset. Responses on several grids are a DataTree with one
child per grid, ``grid_1``, ``grid_2`` ...; no grid is ever padded with the points of another.
"""

import warnings
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.atomic import replacing
from identkit.errors import InputError, Problem

Gridded: TypeAlias = xr.Dataset | xr.DataTree

_PREFIX = "grid_"


def datasets(data: Gridded) -> list[xr.Dataset]:
    """Return the datasets of `data`, one per frequency grid, in the order of their groups."""
    if isinstance(data, xr.Dataset):
        return [data]
    names = [name for name in data.children if _grid_number(str(name)) > 0]
    if not names:
        return [data.to_dataset()]
    return [data[name].to_dataset() for name in sorted(names, key=_grid_number)]


def gather(parts: Sequence[xr.Dataset]) -> Gridded:
    """Return one dataset as it is, several as a tree of ``grid_1``, ``grid_2`` ...

    The attributes of the first part also stand on the root of the tree.

    Raises
    ------
    ValueError
        If there is no part.
    """
    if not parts:
        raise ValueError("found 0 datasets to gather; expected at least one")
    if len(parts) == 1:
        return parts[0]
    tree = xr.DataTree.from_dict({f"{_PREFIX}{k}": part for k, part in enumerate(parts, start=1)})
    tree.attrs.update(parts[0].attrs)
    return tree


def label_mask(part: xr.Dataset, labels: Mapping[str, str | float]) -> NDArray[np.bool_]:
    """Return which responses of a dataset carry all the given labels.

    Parameters
    ----------
    part
        Any dataset with labels along `response`.
    labels
        Values by label; ``response`` is the name itself. Text is compared as text, numbers as
        numbers.

    Raises
    ------
    InputError
        If the dataset has no such label.
    """
    mask = np.ones(part.sizes["response"], dtype=bool)
    for name, value in labels.items():
        if name not in part.coords or part[name].dims != ("response",):
            known = [str(k) for k, v in part.coords.items() if v.dims == ("response",)]
            expected = "one of " + ", ".join(sorted(known))
            raise InputError(Problem("a label of responses", f'"{name}"', expected))
        there = part[name].values
        if there.dtype.kind == "f" and isinstance(value, str):
            raise InputError(Problem(f"the label {name}", f'"{value}"', "a number"))
        mask &= there == (value if there.dtype.kind == "f" else str(value))
    return mask


def save(data: Gridded, path: Path | str) -> None:
    """Write `data` to a NetCDF-4 file, replacing an older one whole or not at all.

    Complex numbers are written as the compound type {r, i}, text as variable-length strings.
    """
    with replacing(path) as temporary, _numpy_notices_off():
        if isinstance(data, xr.DataTree):
            data.to_netcdf(temporary, engine="h5netcdf")
        else:
            data.to_netcdf(temporary, engine="h5netcdf")


def load(path: Path | str) -> Gridded:
    """Read a file written by `save`, wholly into memory.

    Raises
    ------
    InputError
        If the file is missing, is no NetCDF-4/HDF5 file, or is cut short.
    """
    place = Path(path)
    with (
        _readable(place),
        _numpy_notices_off(),
        xr.open_datatree(place, engine="h5netcdf", phony_dims="access") as tree,
    ):
        parts = [_plain(part.load()) for part in datasets(tree)]
    return gather(parts)


@contextmanager
def _readable(place: Path) -> Iterator[None]:
    """Turn what the file library says about a missing or damaged file into one sentence."""
    expected = "a readable NetCDF-4/HDF5 file"
    if not place.exists():
        raise InputError(Problem(str(place), "no such file", expected))
    if place.is_dir():
        raise InputError(Problem(str(place), "a folder", expected))
    if place.stat().st_size == 0:
        raise InputError(Problem(str(place), "an empty file", expected))
    try:
        yield
    except PermissionError:
        raise InputError(Problem(str(place), "no permission to read it", expected)) from None
    except (OSError, ValueError, KeyError, RuntimeError, TypeError, AttributeError) as error:
        found = f"a file that is damaged, cut short or of another kind ({_first_line(error)})"
        raise InputError(Problem(str(place), found, expected)) from error


@contextmanager
def _numpy_notices_off() -> Iterator[None]:
    """Keep notices that the file library owes to numpy's next versions from the user."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)
        warnings.simplefilter("ignore", FutureWarning)
        yield


def _plain(part: xr.Dataset) -> xr.Dataset:
    """Return `part` as it was before it was written: fixed-width text, plain attributes."""
    text = {
        name: (variable.dims, variable.values.astype(str), variable.attrs)
        for name, variable in part.variables.items()
        if variable.dtype.kind in "OT"
    }
    plain = part.assign_coords({k: v for k, v in text.items() if k in part.coords})
    plain = plain.assign({k: v for k, v in text.items() if k not in part.coords})
    for variable in plain.variables.values():
        variable.encoding.clear()
    plain.attrs = {name: _plain_attribute(value) for name, value in part.attrs.items()}
    return plain


def _plain_attribute(value: Any) -> Any:
    return value.tolist() if isinstance(value, np.ndarray | np.generic) else value


def _grid_number(name: str) -> int:
    tail = name.removeprefix(_PREFIX)
    return int(tail) if tail.isdigit() and name.startswith(_PREFIX) else 0


def _first_line(error: BaseException) -> str:
    lines = str(error).strip().splitlines()
    return lines[0] if lines else type(error).__name__
