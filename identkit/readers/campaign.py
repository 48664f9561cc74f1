"""A whole campaign of measured responses, from many files to one labelled dataset."""

import json
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, gather
from identkit.readers.columns import ColumnChoice, column_choices
from identkit.readers.measured import MeasuredResponse
from identkit.readers.path_pattern import NUMBER_LABELS, LabelledFile, PathPattern
from identkit.readers.text import read_text
from identkit.settings import ResponseSettings, Settings

Progress = Callable[[int, int], None]

_DIMS = ("response", "output", "input", "frequency")


@dataclass
class _Campaign:
    """What has been read so far."""

    files: list[LabelledFile] = field(default_factory=list)
    measured: list[MeasuredResponse] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)


def read_responses(
    files: str | Path | Sequence[str | Path],
    *,
    folder: Path | str = ".",
    pattern: str | None = None,
    averages: float | None = None,
    columns: Mapping[str, Any] | None = None,
    units: Mapping[str, str] | None = None,
    bad_files: str = "stop",
    progress: Progress | None = None,
) -> Gridded:
    """Read measured scalar frequency responses into one labelled dataset.

    Parameters
    ----------
    files
        A path pattern with labels, ``"bench/{unit}/H{head}_{temperature:g}C.csv"``, or a list of
        files.
    folder
        Where a relative pattern starts, and what `source` is relative to.
    pattern
        With a list of files: the pattern that gives their labels, where it fits.
    averages
        Number of averages; with coherence it gives the variance (open loop only).
    columns
        Names and units that differ from the defaults, as in ``[responses.columns]``.
    units
        Units of the plant's ``input`` and ``output``, kept as given.
    bad_files
        "stop" refuses every bad file at once; "skip" goes on without them and names them in the
        attribute ``skipped_files``.
    progress
        Called with the number of files done and the number of all.

    Returns
    -------
    Dataset or DataTree
        `frequency_response` (response, output, input, frequency) with its variance or coherence
        where given, and the labels along `response`; a tree ``grid_1`` ... when the files stand
        on several frequency grids.

    Raises
    ------
    InputError
        With one problem per bad file.

    Notes
    -----
    A line at 0 Hz is left out: a resonance is not seen at rest. A response is refused when a value
    is no finite number, frequencies do not increase, the response is zero somewhere, a coherence
    lies outside 0 to 1, a variance is not above 0, or fewer than two points stand above 0 Hz.
    """
    tables = {
        "responses": {
            "averages": averages,
            "bad_files": bad_files,
            "columns": dict(columns or {}),
            "units": dict(units or {}),
        }
    }
    options = Settings.from_tables(tables, path="read_responses").responses
    return read_campaign(
        find_files(files, folder=Path(folder), pattern=pattern),
        options,
        folder=Path(folder),
        progress=progress,
    )


@dataclass(frozen=True)
class CampaignFiles:
    """The files of a campaign with their labels, and those whose labels are wrong."""

    files: tuple[LabelledFile, ...]
    strays: tuple[Problem, ...] = ()


def find_files(
    files: str | Path | Sequence[str | Path], *, folder: Path, pattern: str | None = None
) -> CampaignFiles:
    """Find the files of a pattern, or take a list as it is, with their labels.

    Raises
    ------
    InputError
        If a pattern matches nothing or is malformed, or two files carry the same labels.
    """
    if isinstance(files, str):
        found = PathPattern(files).find(folder)
        return CampaignFiles(found.files, found.strays)
    paths = [files] if isinstance(files, Path) else [Path(file) for file in files]
    if not paths:
        raise InputError(Problem("files", "an empty list", "at least one file"))
    label = PathPattern(pattern).label if pattern else (lambda path: {})
    resolved = [path.resolve() for path in paths]
    above = Path(os.path.commonpath([path.parent for path in resolved]))
    return CampaignFiles(
        tuple(
            LabelledFile(path, whole.relative_to(above).with_suffix("").as_posix(), label(path))
            for path, whole in zip(paths, resolved, strict=True)
        )
    )


def read_campaign(
    found: CampaignFiles,
    options: ResponseSettings,
    *,
    folder: Path,
    progress: Progress | None = None,
) -> Gridded:
    """Read the files that were found; the rest is as in `read_responses`.

    Raises
    ------
    InputError
        With one problem per bad file, or if no good file is left.
    """
    choices = column_choices(options.columns, options.units)
    campaign = _Campaign(problems=list(found.strays))
    for done, file in enumerate(found.files, start=1):
        _read_into(campaign, file, choices, options.averages)
        if progress is not None:
            progress(done, len(found.files))
    campaign.problems += _variance_strays(campaign)
    if campaign.problems and (options.bad_files == "stop" or not campaign.files):
        raise InputError(campaign.problems)
    return _assembled(campaign, options, folder)


def _read_into(
    campaign: _Campaign,
    file: LabelledFile,
    choices: dict[str, ColumnChoice],
    averages: float | None,
) -> None:
    try:
        measured = read_text(file.path, choices, averages)
    except InputError as error:
        campaign.problems.extend(error.problems)
        return
    campaign.files.append(file)
    campaign.measured.append(measured)


def _variance_strays(campaign: _Campaign) -> list[Problem]:
    """Take out the files whose variance is known in another way than that of most files."""
    sources = [measured.variance_source for measured in campaign.measured]
    if len(set(sources)) < 2:
        return []
    usual = max(dict.fromkeys(sources), key=sources.count)
    words = {
        "measured": "a variance column",
        "coherence": "a coherence column",
        "residuals": "neither variance nor usable coherence",
    }
    strays = [k for k, source in enumerate(sources) if source != usual]
    problems = [
        Problem(str(campaign.files[k].path), words[sources[k]], f"{words[usual]}, as most files")
        for k in strays
    ]
    keep = [k for k in range(len(sources)) if k not in strays]
    campaign.files = [campaign.files[k] for k in keep]
    campaign.measured = [campaign.measured[k] for k in keep]
    return problems


def _assembled(campaign: _Campaign, options: ResponseSettings, folder: Path) -> Gridded:
    """Put the responses together, one dataset per frequency grid in the order first seen."""
    groups: dict[bytes, list[int]] = {}
    for k, measured in enumerate(campaign.measured):
        groups.setdefault(measured.frequency.tobytes(), []).append(k)
    attributes = _attributes(campaign, options)
    parts = [
        _dataset([campaign.files[k] for k in group], [campaign.measured[k] for k in group], folder)
        for group in groups.values()
    ]
    return gather([part.assign_attrs(attributes) for part in parts])


def _attributes(campaign: _Campaign, options: ResponseSettings) -> dict[str, Any]:
    skipped = [
        {"file": problem.place, "reason": f"found {problem.found}; expected {problem.expected}"}
        for problem in campaign.problems
    ]
    return {
        "sample_period": options.sample_period,
        "input_unit": options.units.input,
        "output_unit": options.units.output,
        "variance_source": campaign.measured[0].variance_source,
        "rest_lines": sum(measured.rest_lines for measured in campaign.measured),
        "skipped_files": json.dumps(skipped),
    }


def _dataset(
    files: Sequence[LabelledFile], measured: Sequence[MeasuredResponse], folder: Path
) -> xr.Dataset:
    """Stack responses on one grid."""

    def stacked(name: str) -> Any:
        return np.stack([getattr(each, name) for each in measured])[:, None, None, :]

    variables = {"frequency_response": (_DIMS, stacked("response"))}
    if measured[0].variance is not None:
        variables["frequency_response_variance"] = (_DIMS, stacked("variance"))
    if all(each.coherence is not None for each in measured):
        variables["coherence"] = (_DIMS, stacked("coherence"))
    data = xr.Dataset(
        variables,
        coords={
            "response": [file.identity for file in files],
            "output": [_channel(files, "output")],
            "input": [_channel(files, "input")],
            "frequency": measured[0].frequency,
        },
    )
    return data.assign_coords(_labels(files, folder))


def _channel(files: Sequence[LabelledFile], name: str) -> str:
    found = sorted({str(file.labels.get(name, name)) for file in files})
    if len(found) > 1:
        shown = ", ".join(found)
        expected = f"one {name}; plants of several channels are not available in this version"
        raise InputError(Problem(f"the label {{{name}}}", shown, expected))
    return found[0]


def _labels(files: Sequence[LabelledFile], folder: Path) -> dict[str, Any]:
    """Return the labels as coordinates along `response`; a missing text is empty, a number NaN."""
    names = dict.fromkeys(name for file in files for name in file.labels)
    labels: dict[str, Any] = {}
    for name in names:
        if name in ("output", "input"):
            continue
        values = [file.labels.get(name) for file in files]
        number = name in NUMBER_LABELS or any(isinstance(value, float) for value in values)
        missing = np.nan if number else ""
        labels[name] = ("response", [missing if value is None else value for value in values])
    labels["source"] = ("response", [_source(file.path, folder) for file in files])
    return labels


def _source(path: Path, folder: Path) -> str:
    return Path(os.path.relpath(path, folder)).as_posix()
