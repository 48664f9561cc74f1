"""The order of the stages, and what a run of them gives."""

import json
import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from identkit.batch import one_thread
from identkit.not_yet import refuse_unavailable
from identkit.progress import Progress, silent
from identkit.settings import load_settings
from identkit.stages.read import find_measurements
from identkit.steps import STEPS, Step, Work
from identkit.study import StudyFolder


@dataclass(frozen=True)
class Run:
    """How a study ended.

    Attributes
    ----------
    folder
        The results folder.
    verdict
        Sentences a person can act on.
    held
        Whether the set holds what it is meant to hold; true where no set was asked for.
    report
        The report page, if the run got that far.
    """

    folder: Path
    verdict: tuple[str, ...]
    held: bool
    report: Path | None


def run_study(
    study: Path | str,
    *,
    until: str | None = None,
    redo: str | None = None,
    jobs: int | None = None,
    progress: Progress = silent,
) -> Run:
    """Run the stages of a study in order, leaving alone those whose results are still good.

    Parameters
    ----------
    study
        The study file.
    until
        Last stage to run; all when None.
    redo
        Stage to do again, with everything that depends on it.
    jobs
        Number of processes; all cores when None. Results do not depend on it.
    progress
        Gives, for a stage's name, a callable for (done, total).

    Raises
    ------
    InputError
        If the study file or a measured file is wrong.
    InfeasibleError
        If a bound that was asked for does not exist.
    """
    settings = load_settings(study)
    refuse_unavailable(settings)
    found = find_measurements(settings)
    kept: dict[str, Any] = {}
    with StudyFolder(settings) as folder, one_thread():
        if redo is not None:
            folder.forget({"estimate": "read"}.get(redo, redo))
        for step in _steps_until(until):
            stage = folder.stage(
                step.name,
                files=step.files,
                settings=step.settings,
                after=step.after,
                inputs=found.paths if step.name == "read" else [],
            )
            if not stage.current or not _set_files_stand(folder, step.name):
                with stage.work():
                    cores = jobs or os.cpu_count() or 1
                    step.work(Work(folder, stage, found, cores, progress(step.name), kept))
        return _ending(folder, until)


def _steps_until(until: str | None) -> tuple[Step, ...]:
    names = [step.name for step in STEPS]
    last = {"estimate": "read"}.get(until or "", until)
    return STEPS[: names.index(last) + 1] if last is not None else STEPS


def _set_files_stand(folder: StudyFolder, name: str) -> bool:
    """Tell whether the set files that the certificate names are there; how many depends on it."""
    if name != "export":
        return True
    certificate = json.loads(folder.path("certificate.json").read_text(encoding="utf-8"))
    return all(folder.path(file).is_file() for file in certificate["set_files"])


def _ending(folder: StudyFolder, until: str | None) -> Run:
    certificate = folder.path("certificate.json")
    report = folder.path("report.html")
    if until is not None or not certificate.exists():
        return Run(folder.folder, (f"Results up to {until} are in {folder.folder}",), True, None)
    ending = json.loads(certificate.read_text(encoding="utf-8"))
    return Run(folder.folder, tuple(ending["verdict"]), bool(ending["held"]), report)
