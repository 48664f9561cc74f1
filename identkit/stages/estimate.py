"""Estimate frequency responses from the time records a study names."""

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from identkit.batch import Progress, run_batch
from identkit.errors import InputError, Problem
from identkit.grids import Gridded, gather
from identkit.methods.arrays import FloatArray
from identkit.methods.repeatable_runout import harmonic_lines
from identkit.readers.campaign import CampaignFiles, find_files, response_labels
from identkit.readers.columns import column_choices
from identkit.readers.path_pattern import LabelledFile, relative_to
from identkit.readers.records import RecordFile
from identkit.readers.text import read_text
from identkit.settings import ResponseSettings, Settings
from identkit.settings_records import RecordSettings
from identkit.stages.record_estimate import RecordEstimate, RecordTask, estimate_record
from identkit.stages.record_sampling import Filter, PlantModel
from identkit.stages.record_screening import as_json, with_marks
from identkit.stages.record_signals import Channels
from identkit.stages.second_opinion import with_opinions

_POINT = ("response", "output", "input", "frequency")
_RATE_TOLERANCE = 1e-3


@dataclass(frozen=True)
class _Group:
    """The files of one response: experiments on one device under one set of labels."""

    first: LabelledFile
    files: tuple[LabelledFile, ...]


def estimate_responses(
    files: str | Path | Sequence[str | Path],
    *,
    sample_period: float,
    folder: Path | str = ".",
    pattern: str | None = None,
    units: dict[str, str] | None = None,
    base: str = "pivot",
    residues: str = "real",
    bad_files: str = "stop",
    jobs: int = 1,
    progress: Progress | None = None,
    **options: Any,
) -> Gridded:
    """Estimate frequency responses from time records.

    Parameters
    ----------
    files
        A path pattern with labels, or a list of files. The label ``{experiment}`` joins several
        records of one device into one response.
    sample_period
        Of the position, s.
    folder, pattern, bad_files
        As in `read_responses`.
    units
        Units of the plant's ``input`` and ``output``, kept as given.
    base, residues
        Of the modal model that gives the images, as ``[model]``.
    jobs
        Number of processes; results do not depend on it.
    progress
        Called with (done, total) responses.
    options
        Any other key of ``[records]``: channels, method, window, hold, bursts, limits, spindle.

    Returns
    -------
    Dataset or DataTree
        `frequency_response` (response, output, input, frequency) [output/input] with its
        `frequency_response_variance`, `coherence` (of position with the excitation),
        `usable_mask`, `averages`, the correlation of neighbouring lines, what was used and why,
        and the marks of the records.

    Raises
    ------
    InputError
        With one problem per bad file.

    Notes
    -----
    With hold "modelled" (the default) the hold of the drive is divided out and the images of the
    plant above half the sampling rate are taken off by means of a modal model (`image_removal`);
    where that cannot be done, and with "divided", they stay in. Lines where they may exceed the
    standard error are not usable. With "kept" the response is that of the samples.
    """
    tables = {
        "responses": {"bad_files": bad_files, "units": units or {}},
        "records": {"files": "records", "sample_period": sample_period, **options},
    }
    settings = Settings.from_tables(tables, path="estimate_responses")
    assert settings.records is not None
    found = find_files(files, folder=Path(folder), pattern=pattern)
    return estimate_campaign(
        found,
        settings.records,
        settings.responses,
        folder=Path(folder),
        model=PlantModel(base, residues),
        jobs=jobs,
        progress=progress,
    )


def estimate_campaign(
    found: CampaignFiles,
    records: RecordSettings,
    responses: ResponseSettings,
    *,
    folder: Path,
    model: PlantModel | None = None,
    jobs: int = 1,
    progress: Progress | None = None,
) -> Gridded:
    """Estimate from the files that were found; the rest is as in `estimate_responses`.

    Raises
    ------
    InputError
        With one problem per bad file, or if no good record is left.
    """
    check_options(records)
    anti_alias = _filter(records, folder)
    groups = _groups(found)
    tasks = [
        RecordTask(
            tuple(RecordFile(f.path, relative_to(f.path, folder)) for f in group.files),
            records,
            model or PlantModel(),
            anti_alias,
        )
        for group in groups
    ]
    results = run_batch(estimate_record, tasks, jobs=jobs, progress=progress, chunk=1)
    bad = [(problem.place, problem) for _, problem in found.strays]
    for task, result in zip(tasks, results, strict=True):
        bad += [(task.files[0].place, problem) for problem in result.problems]
    good = [k for k, result in enumerate(results) if result.estimate is not None]
    if bad and (responses.bad_files == "stop" or not good):
        raise InputError([problem for _, problem in bad])
    reasons = [(place, str(problem).removeprefix(place).lstrip(",: ")) for place, problem in bad]
    parts = _by_grid([groups[k] for k in good], [results[k] for k in good])
    attributes = _attributes(records, responses, as_json(reasons))
    return gather([_dataset(*part, records, folder).assign_attrs(attributes) for part in parts])


def check_options(records: RecordSettings) -> None:
    """Refuse options that contradict each other.

    Raises
    ------
    InputError
        With one problem per contradiction.
    """
    problems = []
    if (records.in_phase is None) != (records.quadrature is None):
        missing = "in_phase" if records.in_phase is None else "quadrature"
        expected = "both burst channels, or neither"
        problems.append(Problem(f"[records] {missing}", "nothing", expected))
    if records.sectors is not None and records.spindle_speed is not None:
        rate = records.sectors * records.spindle_speed / 60.0
        if abs(rate * records.sample_period - 1.0) > _RATE_TOLERANCE:
            found = f"{1.0 / records.sample_period:.6g} samples per second"
            expected = f"{rate:.6g}, which sectors and spindle_speed give"
            problems.append(Problem("[records] sample_period", found, expected))
    channels = Channels.of(records)
    if len(channels.excitation) < len(channels.drive):
        found = f"{len(channels.excitation)} excitations for {len(channels.drive)} drives"
        problems.append(Problem("[records] excitation", found, "as many as drives"))
    if problems:
        raise InputError(problems)


def _groups(found: CampaignFiles) -> list[_Group]:
    """Join files that differ in the label ``experiment`` only."""
    by_labels: dict[tuple[Any, ...], list[LabelledFile]] = defaultdict(list)
    for number, file in enumerate(found.files):
        labels = {k: v for k, v in file.labels.items() if k != "experiment"}
        alone = () if "experiment" in file.labels else (number,)
        by_labels[(*labels.items(), *alone)].append(file)
    groups = []
    for files in by_labels.values():
        first = files[0]
        if "experiment" in first.labels:
            kept = {k: v for k, v in first.labels.items() if k != "experiment"}
            name = "/".join(str(value) for value in kept.values()) or first.identity
            first = LabelledFile(first.path, name, kept)
        groups.append(_Group(first, tuple(files)))
    return groups


def _filter(records: RecordSettings, folder: Path) -> Filter | None:
    if records.anti_alias is None:
        return None
    choices = column_choices(ResponseSettings().columns, ResponseSettings().units)
    read = read_text(folder / records.anti_alias, choices, None, records.anti_alias)
    return read.frequency, read.response


def _by_grid(
    groups: list[_Group], results: list[RecordEstimate]
) -> list[tuple[list[_Group], list[RecordEstimate]]]:
    parts: dict[bytes, tuple[list[_Group], list[RecordEstimate]]] = {}
    for group, result in zip(groups, results, strict=True):
        assert result.estimate is not None
        key = result.estimate.frequency.tobytes()
        there = parts.setdefault(key, ([], []))
        there[0].append(group)
        there[1].append(result)
    return list(parts.values())


def _attributes(
    records: RecordSettings, responses: ResponseSettings, skipped: str
) -> dict[str, Any]:
    channels = Channels.of(records)
    unit = responses.units.output
    if channels.from_bursts and not unit:
        unit = "track" if records.tracks_per_inch is None else "nm"
    return {
        "sample_period": records.sample_period if records.hold == "kept" else 0.0,
        "record_sample_period": records.sample_period,
        "hold": "zero-order",
        "window": records.window,
        "overlap": records.overlap,
        "input_unit": responses.units.input,
        "output_unit": unit,
        "variance_source": "measured",
        "rest_lines": 0,
        "skipped_files": skipped,
    }


def _dataset(
    groups: list[_Group],
    results: list[RecordEstimate],
    records: RecordSettings,
    folder: Path,
) -> xr.Dataset:
    """Stack responses on one grid."""
    plants = [result.plant for result in results if result.plant is not None]
    estimates = [result.estimate for result in results if result.estimate is not None]
    response, variance, image, usable = (
        np.stack([getattr(plant, name) for plant in plants])
        for name in ("response", "variance", "image_error", "usable")
    )
    coherence = np.stack([plant.coherence for plant in plants])[:, :, None, :]
    channels = Channels.of(records)
    data = xr.Dataset(
        {
            "frequency_response": (_POINT, np.where(usable, response, complex(np.nan, np.nan))),
            "frequency_response_variance": (_POINT, np.where(usable, variance, np.nan)),
            "coherence": (_POINT, np.broadcast_to(coherence, response.shape).copy()),
            "usable_mask": (_POINT, usable),
            "image_error": (_POINT, image),
            "averages": ("response", [each.averages for each in estimates]),
            "estimator": ("response", [result.method for result in results]),
            "estimator_reason": ("response", [result.reason for result in results]),
            "hold_treatment": ("response", [plant.hold for plant in plants]),
            "direct_bias_over_error": ("response", [_bias(result) for result in results]),
            "runout": ("response", [result.runout for result in results]),
            "record_samples": ("response", [result.tally.samples for result in results]),
            "drive_peak": ("response", [result.tally.drive_peak for result in results]),
            "position_peak": ("response", [result.tally.position_peak for result in results]),
            "line_correlation": (("response", "line_distance"), _correlations(estimates)),
        },
        coords={
            "response": [group.first.identity for group in groups],
            "output": channels.position,
            "input": channels.drive,
            "frequency": plants[0].frequency,
        },
    )
    data = data.assign_coords(response_labels([group.first for group in groups], folder))
    if records.spindle_speed is not None:
        frequency = plants[0].frequency
        width = float(np.median(np.diff(frequency)))
        on = harmonic_lines(frequency, records.spindle_speed / 60.0, width)
        data["runout_harmonic"] = ("frequency", on)
    if records.second_opinion:
        data = with_opinions(data, [result.opinion for result in results])
    return with_marks(data, results)


def _bias(result: RecordEstimate) -> float:
    return np.nan if result.bias is None else result.bias.share_of_error


def _correlations(estimates: list[Any]) -> FloatArray:
    longest = max(each.correlation.size for each in estimates)
    out = np.zeros((len(estimates), longest))
    for row, each in zip(out, estimates, strict=True):
        row[: each.correlation.size] = each.correlation
    return out
