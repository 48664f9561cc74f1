"""Auditing a released set against new measurements, as the command line does it."""

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from io import StringIO
from pathlib import Path

import numpy as np
import xarray as xr
from rich.console import Console
from rich.table import Table

from identkit.batch import one_thread
from identkit.errors import InputError, Problem
from identkit.grids import load
from identkit.plant_set.files import load_set
from identkit.plant_set.model import PlantSet
from identkit.readers.campaign import find_files, read_campaign
from identkit.settings import Settings, load_settings
from identkit.stages.audit import all_held, audit, failed_sentences
from identkit.stages.fit import fit_modes
from identkit.stages.screen import screen
from identkit.stages.unexplained import unexplained_share

ROWS_SHOWN = 40
_COLUMNS = (
    "response",
    "verdict",
    "reach",
    "at Hz",
    "mode",
    "points, noise and all",
    "left out of the set",
)
ORDER = {"not held": 0, "cannot tell": 1, "not judged": 2, "held": 3}


@dataclass(frozen=True)
class SetAudit:
    """What the audit found, in words, and whether everything is held."""

    text: str
    held: bool


def audit_files(place: Path, responses: Sequence[Path], study: Path | None = None) -> SetAudit:
    """Judge measured responses against the set in a file.

    Parameters
    ----------
    place
        The set file.
    responses
        Response files, text or NetCDF, and results folders.
    study
        Study file that names columns, units, averages and the labels in paths of text files.

    Raises
    ------
    InputError
        If a file is missing or wrong.
    """
    with one_thread():
        return _judged(load_set(place), responses, study)


def _judged(plant_set: PlantSet, responses: Sequence[Path], study: Path | None) -> SetAudit:
    folders = [path for path in responses if path.is_dir()]
    files = [path for path in responses if not path.is_dir()]
    tables = [_audit_folder(plant_set, folder) for folder in folders]
    if files:
        tables.append(_audit_new(plant_set, files, study))
    held = all(all_held(table) for table in tables)
    text = "\n".join([*(_text(table) for table in tables), _word(tables, held)])
    return SetAudit(text, held)


def _audit_folder(plant_set: PlantSet, folder: Path) -> xr.Dataset:
    for name in ("responses.nc", "screening.nc", "modes.nc"):
        if not (folder / name).is_file():
            found = f"no {name}"
            raise InputError(Problem(str(folder), found, "a results folder run up to pair"))
    modes = load(folder / "modes.nc")
    assert isinstance(modes, xr.Dataset)
    responses, screening = load(folder / "responses.nc"), load(folder / "screening.nc")
    return audit(plant_set, modes, responses, screening)


def _audit_new(plant_set: PlantSet, files: Sequence[Path], study: Path | None) -> xr.Dataset:
    missing = [path for path in files if not path.exists()]
    if missing:
        raise InputError([Problem(str(path), "no such file", "a file") for path in missing])
    settings = load_settings(study) if study is not None else _settings_of(plant_set)
    pattern = settings.responses.files if study is not None else None
    folder = settings.folder if study is not None else Path()
    found = find_files(list(files), folder=folder, pattern=pattern)
    responses = read_campaign(found, settings.responses, folder=folder)
    screening = screen(
        responses, band=plant_set.band, **settings.screen.model_dump(exclude={"leave_out"})
    )
    model = settings.model.model_dump(exclude={"sharing"})
    fits = fit_modes(responses, screening, **model)
    left = unexplained_share(fits, responses, screening)
    fits = fits.assign(unexplained_share=("response", left))
    table = audit(plant_set, fits, responses, screening)
    # files named one by one are asked about one by one, whatever the set left out when it was made
    return table.assign(excluded=("response", np.zeros(table.sizes["response"], dtype=bool)))


def _settings_of(plant_set: PlantSet) -> Settings:
    """Return the settings the set was made with, as far as its file tells them."""
    known = plant_set.provenance.settings
    tables = {name: known[name] for name in ("screen", "model") if name in known}
    return Settings.from_tables(tables, path="study.toml")


def _text(table: xr.Dataset) -> str:
    rows = sorted(
        range(table.sizes["response"]),
        key=lambda k: (ORDER.get(str(table["verdict"].values[k]), 0), -_reach(table, k)),
    )
    grid = Table(*_COLUMNS, box=None)
    for k in rows[:ROWS_SHOWN]:
        grid.add_row(*_cells(table, k))
    out = Console(file=StringIO(), width=120)
    out.print(grid)
    assert isinstance(out.file, StringIO)
    text = "\n".join(line.rstrip() for line in out.file.getvalue().splitlines())
    hidden = len(rows) - ROWS_SHOWN
    more = [f"... and {hidden} more, none worse"] if hidden > 0 else []
    return "\n".join([text, *more, *_unheld_claims(table)])


def _cells(table: xr.Dataset, k: int) -> list[str]:
    row = table.isel(response=k)
    by_fit = "no fit" not in str(row["fit_verdict"].values)
    hertz = float(row["fit_reach_frequency" if by_fit else "raw_reach_frequency"])
    return [
        str(row["response"].values),
        str(row["verdict"].values),
        f"{_reach(table, k):.3f}",
        f"{hertz:.5g}",
        _named_mode(str(row["nearest_mode"].values)),
        f"{float(row['raw_reach']):.3f}",
        str(row["reason"].values),
    ]


def _named_mode(name: str) -> str:
    """Return the name of a population mode; modes of an unpaired fit have only a number."""
    return "" if name.isdigit() else name


def _reach(table: xr.Dataset, k: int) -> float:
    """Return the reach of the fit, or where there is none that of the points, noise and all."""
    row = table.isel(response=k)
    by_fit = float(row["fit_reach"])
    return by_fit if by_fit == by_fit else float(row["raw_reach"])


def _unheld_claims(table: xr.Dataset) -> list[str]:
    return [sentence for sentence in failed_sentences(table) if " is not held" not in sentence]


def _word(tables: Sequence[xr.Dataset], held: bool) -> str:
    counted = Counter(
        str(verdict)
        for table in tables
        for verdict, excluded in zip(table["verdict"].values, table["excluded"].values, strict=True)
        if not excluded
    )
    total = sum(counted.values())
    words = ", ".join(f"{word} {counted[word]}" for word in ORDER if counted[word])
    answer = "held" if held else "not held" if counted["not held"] else "cannot be told"
    return f"Of {total} responses: {words}. Answer: {answer}."
