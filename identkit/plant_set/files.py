"""Plant set files: load and save, JSON or HDF5; loading needs numpy only (and h5py for HDF5)."""

from pathlib import Path

from identkit.plant_set.model import PlantSet


def load_set(path: str | Path) -> PlantSet:
    """Load a plant set file.

    Parameters
    ----------
    path
        ``set.json`` or ``set.h5``.

    Raises
    ------
    InputError
        If the file is not there, cut short, or breaks the format; the message names the field.
    """
    return PlantSet.load(path)


def save_set(plant_set: PlantSet, path: str | Path, format: str | None = None) -> None:
    """Write a plant set file; the old file stays until the new one is whole.

    Parameters
    ----------
    plant_set
        The set.
    path
        Where to.
    format
        "json" or "hdf5"; by the suffix of `path` where None.

    Raises
    ------
    InputError
        If the set breaks the format or the format is unknown; nothing is written then.
    """
    plant_set.save(path, format)
