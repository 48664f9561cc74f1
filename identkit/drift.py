"""Watching production: results folders into the history, charts, verdict, page."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.history.adding import Added, add_folders, release_set
from identkit.history.entries import Folder, read_folder
from identkit.history.reading import History, fill_reach, read_history
from identkit.history.store import Store
from identkit.report.drift_contents import DriftInput, drift_sentences, drift_state, series_words
from identkit.report.drift_page import write_drift_report
from identkit.stages.drift_charts import ChartRules, chart_measured_again, chart_new_units
from identkit.stages.drift_points import unit_points
from identkit.stages.drift_signals import (
    joint_first,
    lots_that_differ,
    not_held,
    signals,
    time_to_exit,
    units_apart,
)
from identkit.study import code_version

LEAST_BASELINE = 5
REPORT_FOLDER = "identkit-drift"


@dataclass(frozen=True)
class Drift:
    """What the charts say.

    Attributes
    ----------
    verdict
        Sentences, what is acted on first.
    signal
        Whether anything moved, or is no longer held by the released set.
    report
        The page; its CSV files stand beside it.
    """

    verdict: tuple[str, ...]
    signal: bool
    report: Path


def track_drift(
    history: str | Path,
    folders: Sequence[Path] = (),
    *,
    plant_set: Path | None = None,
    run_length: float | None = None,
    baseline: int | None = None,
    report: Path | None = None,
) -> Drift:
    """Add results folders to a history, chart everything in it, and judge.

    Parameters
    ----------
    history
        A file, a folder, or an SQLAlchemy URL.
    folders
        Results folders to add; none to judge what is there.
    plant_set
        Set file that becomes the released one; by default the one released before, or that of the
        first folder.
    run_length
        Units between false alarms of all charts together, at least, on average; kept in the
        history.
    baseline
        Units that make the baseline; kept in the history.
    report
        Folder for the page and its files; beside the history's file by default.

    Raises
    ------
    InputError
        If a folder is no results folder, a measurement is in the history already, or the history
        cannot be opened; nothing is added then.
    """
    _refuse_rules(run_length, baseline)
    read = [read_folder(Path(folder)) for folder in folders]
    with Store(str(history)) as store:
        added = add_folders(store, read, code_version()) if read else Added()
        _keep_rules(store, run_length, baseline)
        _release(store, plant_set, read)
        fill_reach(store)
        stored = read_history(store)
        target = report or _beside(store)
        name = store.name
    if not stored.measurements.sizes["measurement"]:
        raise InputError(Problem(name, "an empty history", "results folders to add to it"))
    given = judge(stored, name, added)
    try:
        page = write_drift_report(given, target)
    except OSError as error:
        found = error.strerror or "an error"
        raise InputError(Problem(str(target), found, "a folder that can be written")) from error
    state, sentence = drift_state(given)
    headline = f"{state[0].upper()}{state[1:]}: {sentence}."
    return Drift((headline, *drift_sentences(given)), given.signalled, page)


def judge(history: History, name: str, added: Added) -> DriftInput:
    """Chart a history and gather what its page shows."""
    correction = history.correction
    points = unit_points(history.measurements, correction)
    rules = ChartRules()
    if np.isfinite(correction.attrs["run_length"]):
        rules = ChartRules(correction.attrs["run_length"], rules.baseline_units)
    if np.isfinite(correction.attrs["baseline_units"]):
        rules = ChartRules(rules.run_length, int(correction.attrs["baseline_units"]))
    charted = chart_new_units(points, rules) if points.sizes["visit"] else None
    again = None
    if bool((points["visit_number"].values > 1).any()):
        again = chart_measured_again(points, rules)
    return DriftInput(
        history=name,
        set_name=history.set_name,
        points=points,
        charted=charted,
        again=again,
        signals=signals(charted) if charted is not None else (),
        again_signals=signals(again) if again is not None else (),
        joint_at=joint_first(charted) if charted is not None else -1,
        outside=not_held(points),
        apart=units_apart(charted) if charted is not None else (),
        exit=time_to_exit(charted) if charted is not None else None,
        left_out=_left_out(history.measurements),
        notes=(*_notes(points, charted), *(added.notes or history.notes)),
        additions=added.numbers,
    )


def _notes(points: xr.Dataset, charted: xr.Dataset | None) -> list[str]:
    notes = []
    if charted is not None:
        notes += [
            f"In the baseline, lot {lot} stands apart in {series_words(series)}."
            for lot, series, _ in lots_that_differ(charted)[:4]
        ]
    if points.attrs["ordered_by"] != "measured_at":
        notes.append("Measurements without a date: units stand in the order of their entry.")
    return notes


def _left_out(measurements: xr.Dataset) -> list[tuple[str, str]]:
    unfitted = ~np.isfinite(measurements["value"].values).any(axis=(1, 2))
    return [
        (str(name), str(reason) or "no usable fit")
        for name, reason, empty in zip(
            measurements["response"].values, measurements["excluded"].values, unfitted, strict=True
        )
        if reason or empty
    ]


def _refuse_rules(run_length: float | None, baseline: int | None) -> None:
    if run_length is not None and not 10.0 <= run_length <= 1e7:
        raise InputError(Problem("run length", f"{run_length:g}", "from 10 to 10 million units"))
    if baseline is not None and baseline < LEAST_BASELINE:
        found = f"{baseline} units"
        raise InputError(Problem("baseline", found, f"at least {LEAST_BASELINE} units"))


def _keep_rules(store: Store, run_length: float | None, baseline: int | None) -> None:
    with store.transaction() as connection:
        if run_length is not None:
            store.set_rule(connection, "run_length", repr(float(run_length)))
        if baseline is not None:
            store.set_rule(connection, "baseline_units", str(baseline))


def _release(store: Store, plant_set: Path | None, folders: Sequence[Folder]) -> None:
    """Release the set that was given; else the first folder's where none is released yet."""
    if plant_set is not None:
        release_set(store, plant_set)
        return
    with store.transaction() as connection:
        released = store.rule(connection, "released_set")
    first = next((folder.set_file for folder in folders if folder.set_file is not None), None)
    if not released and first is not None:
        release_set(store, first)


def _beside(store: Store) -> Path:
    if store.file is None:
        return Path(REPORT_FOLDER)
    return store.file.with_name(f"{store.file.stem}-drift")
