"""What is inside a file: responses, modes and other labelled results, or a plant set."""

from pathlib import Path

import h5py
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import datasets, load
from identkit.plant_set.files import load_set
from identkit.plant_set.model import PlantSet
from identkit.variables import LABELS, VARIABLES

_MEANING = {
    variable.name: variable
    for variable in (*LABELS, *(v for group in VARIABLES.values() for v in group))
}


def describe(path: Path) -> str:
    """Return a plain text page on what `path` holds.

    Raises
    ------
    InputError
        If the file is missing, damaged, or of no kind known here.
    """
    if not path.is_file():
        raise InputError(Problem(str(path), "no such file", "a results file or a set file"))
    if path.suffix == ".json" or _is_set(path):
        return describe_set(load_set(path), str(path))
    if path.suffix not in (".nc", ".h5", ".hdf5"):
        expected = "a .nc, .h5 or .json file written by identkit"
        raise InputError(Problem(str(path), f'a file ending in "{path.suffix}"', expected))
    parts = datasets(load(path))
    pages = [_describe_dataset(part) for part in parts]
    if len(pages) > 1:
        pages = [f"Frequency grid {k}\n{page}" for k, page in enumerate(pages, start=1)]
    return "\n\n".join([f"{path}", *pages])


def _is_set(path: Path) -> bool:
    if path.suffix not in (".h5", ".hdf5"):
        return False
    try:
        with h5py.File(path, "r") as file:
            return "nominal" in file and "certificate" in file
    except OSError:
        return False


def _describe_dataset(part: xr.Dataset) -> str:
    sizes = ", ".join(f"{count} {dim}" for dim, count in part.sizes.items())
    lines = [f"Holds {sizes}"]
    if "frequency" in part.coords:
        grid = part["frequency"].values
        lines.append(f"Frequency {grid[0]:g} to {grid[-1]:g} Hz")
    lines += [_label_line(part, name) for name in _labels(part)]
    width = max((len(str(name)) for name in part.data_vars), default=0)
    lines += ["", *(_variable_line(part, str(name), width) for name in part.data_vars)]
    return "\n".join(lines)


def _labels(part: xr.Dataset) -> list[str]:
    return [
        str(name)
        for name, coordinate in part.coords.items()
        if coordinate.dims == ("response",) and name not in ("response", "source")
    ]


def _label_line(part: xr.Dataset, name: str) -> str:
    values = list(dict.fromkeys(part[name].values.tolist()))
    shown = ", ".join(str(value) for value in values[:8])
    return f"{name}: {len(values)} different ({shown}{', ...' if len(values) > 8 else ''})"


def _variable_line(part: xr.Dataset, name: str, width: int) -> str:
    known = _MEANING.get(name)
    dims = ", ".join(str(dim) for dim in part[name].dims) or "one value"
    about = f"{known.meaning} [{known.unit}]" if known and known.unit else ""
    about = about or (known.meaning if known else "")
    return f"  {name:<{width}}  ({dims})  {about}".rstrip()


def describe_set(plant_set: PlantSet, place: str) -> str:
    """Return a plain text page on a plant set."""
    certificate, weight = plant_set.certificate, plant_set.weights.left
    measured, between = certificate.measured, certificate.between_grid
    optimality, low_high = certificate.optimality, plant_set.band
    channels = ", ".join(f"{c.name} [{c.unit}]" for c in (*plant_set.inputs, *plant_set.outputs))
    lines = [
        f"{place}: {plant_set.form} plant set, {plant_set.time.domain} time",
        f"Input and output: {channels}",
        f"Claimed in {low_high[0]:g} to {low_high[1]:g} Hz; outside it nothing is claimed",
        f"Nominal: {plant_set.nominal.states} states",
        f"Weight: {weight.states if weight else 0} states",
        f"Holds {measured.held} of {measured.of} measured responses; "
        f"{len(measured.excluded)} left out on purpose",
        f"Weight above required radius by at most {optimality.excess_db:.3f} dB "
        f"(no weight of this order can do better than {optimality.floor_db:.3f} dB; "
        f"gap {optimality.gap_db:.4f} dB)",
        f"Largest reach between the lines: {between.worst:.6f} ({between.method})",
        f"Plants listed here: {len(plant_set.plants)}",
    ]
    reasons = dict.fromkeys(f"left out: {each.reason}" for each in measured.excluded)
    return "\n".join([*lines, *reasons])
