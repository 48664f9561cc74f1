"""The demo study, and the study file to start from."""

from importlib.resources import files
from pathlib import Path

from identkit.errors import InputError, Problem
from identkit.synthetic import invent_campaign
from identkit.synthetic_files import write_campaign
from identkit.synthetic_record_files import invent_bench_campaign, write_records


def write_demo(folder: Path, *, records: bool = False) -> Path:
    """Write the invented campaign and its study file.

    Parameters
    ----------
    folder
        Made if it does not exist. A folder that already holds the demo is used as it is, so that
        the study resumes; a folder with anything else in it is refused.
    records
        Write closed-loop time records of an invented bench in place of measured responses.

    Returns
    -------
    Path
        The study file.

    Raises
    ------
    InputError
        If the folder holds something else, or cannot be written.
    """
    packaged = "demo_records_study.toml" if records else "demo_study.toml"
    study, text = folder / "study.toml", _packaged(packaged)
    if study.exists() and study.read_text(encoding="utf-8") == text:
        return study
    if folder.exists() and any(folder.iterdir()):
        raise InputError(Problem(str(folder), "a folder with other files in it", "an empty folder"))
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if records:
            write_records(folder, invent_bench_campaign())
        else:
            write_campaign(folder, invent_campaign())
        study.write_text(text, encoding="utf-8")
    except OSError as error:
        raise InputError(_unwritable(folder, error)) from error
    return study


def write_template(folder: Path) -> Path:
    """Write a commented study.toml to start from; refuse to replace one.

    Raises
    ------
    InputError
        If the folder already has a study.toml, or cannot be written.
    """
    study = folder / "study.toml"
    if study.exists():
        raise InputError(Problem(str(study), "an existing study", "a folder without study.toml"))
    try:
        folder.mkdir(parents=True, exist_ok=True)
        study.write_text(_packaged("study_template.toml"), encoding="utf-8")
    except OSError as error:
        raise InputError(_unwritable(folder, error)) from error
    return study


def _packaged(name: str) -> str:
    return files("identkit").joinpath(name).read_text(encoding="utf-8")


def _unwritable(folder: Path, error: OSError) -> Problem:
    return Problem(str(folder), error.strerror or "an error", "a folder that can be written")
