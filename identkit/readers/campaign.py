"""A whole campaign of measured responses, from many files to one labelled dataset."""

import json
import os
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, gather
from identkit.readers.columns import ColumnChoice, column_choices
from identkit.readers.measured import MeasuredResponse
from identkit.readers.netcdf import SUFFIXES, read_netcdf
from identkit.readers.path_pattern import (
    NUMBER_LABELS,
    LabelledFile,
    PathPattern,
    relative_to,
    without_suffix,
)
from identkit.readers.path_pattern import CampaignFiles as CampaignFiles
from identkit.readers.text import read_text
from identkit.settings import ResponseSettings, Settings

Progress = Callable[[int, int], None]

_DIMS = ("response", "output", "input", "frequency")


@dataclass
class _Campaign:
    """What has been read so far."""

    files: list[LabelledFile] = field(default_factory=list)
    measured: list[MeasuredResponse] = field(default_factory=list)
    bad: list[tuple[str, Problem]] = field(default_factory=list)

    def keep(self, places: Sequence[int]) -> None:
        """Go on with these responses only."""
        self.files = [self.files[k] for k in places]
        self.measured = [self.measured[k] for k in places]


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
        return PathPattern(files).find(folder)
    paths = [files] if isinstance(files, Path) else [Path(file) for file in files]
    if not paths:
        raise InputError(Problem("files", "an empty list", "at least one file"))
    known = PathPattern(pattern) if pattern else None
    label = known.label if known else (lambda path: {})
    named = [known.identity(path) if known else None for path in paths]
    resolved = [path.resolve() for path in paths]
    above = Path(os.path.commonpath([path.parent for path in resolved]))
    return CampaignFiles(
        tuple(
            LabelledFile(
                path, name or without_suffix(whole.relative_to(above).as_posix()), label(path)
            )
            for path, whole, name in zip(paths, resolved, named, strict=True)
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
    campaign = _Campaign(bad=[(problem.place, problem) for _, problem in found.strays])
    for done, file in enumerate(found.files, start=1):
        place = relative_to(file.path, folder)
        try:
            read = _read_file(file, place, options, choices, alone=len(found.files) == 1)
        except InputError as error:
            campaign.bad += [(place, problem) for problem in error.problems]
        else:
            campaign.files += [each for each, _ in read]
            campaign.measured += [measured for _, measured in read]
        if progress is not None:
            progress(done, len(found.files))
    _take_out_variance_strays(campaign, folder)
    if campaign.bad and (options.bad_files == "stop" or not campaign.files):
        raise InputError([problem for _, problem in campaign.bad])
    return _assembled(campaign, options, folder)


def _read_file(
    file: LabelledFile,
    place: str,
    options: ResponseSettings,
    choices: dict[str, ColumnChoice],
    *,
    alone: bool,
) -> list[tuple[LabelledFile, MeasuredResponse]]:
    """Read one file by the reader its suffix asks for."""
    if file.path.suffix.lower() not in SUFFIXES:
        return [(file, read_text(file.path, choices, options.averages, place))]
    found = read_netcdf(file, options, place)
    if alone:
        return found
    if len(found) == 1:
        return [(replace(found[0][0], identity=file.identity), found[0][1])]
    return [(replace(f, identity=f"{file.identity}/{f.identity}"), m) for f, m in found]


def _take_out_variance_strays(campaign: _Campaign, folder: Path) -> None:
    """Take out the files whose variance is known in another way than that of most files."""
    sources = [measured.variance_source for measured in campaign.measured]
    if len(set(sources)) < 2:
        return
    usual = max(dict.fromkeys(sources), key=sources.count)
    words = {
        "measured": "a variance of its own",
        "coherence": "a variance from coherence",
        "residuals": "neither variance nor coherence with averages",
    }
    for file, source in zip(campaign.files, sources, strict=True):
        if source != usual:
            place = relative_to(file.path, folder)
            problem = Problem(place, words[source], f"{words[usual]}, as most files have")
            campaign.bad.append((place, problem))
    campaign.keep([k for k, source in enumerate(sources) if source == usual])


def _assembled(campaign: _Campaign, options: ResponseSettings, folder: Path) -> Gridded:
    """Put the responses together, one dataset per frequency grid in the order first seen."""
    groups: dict[bytes, list[int]] = {}
    for k, measured in enumerate(campaign.measured):
        groups.setdefault(measured.frequency.tobytes(), []).append(k)
    _refuse_same_names(campaign.files)
    attributes = _attributes(campaign, options)
    parts = [
        _dataset([campaign.files[k] for k in group], [campaign.measured[k] for k in group], folder)
        for group in groups.values()
    ]
    return gather([part.assign_attrs(attributes) for part in parts])


def _refuse_same_names(files: Sequence[LabelledFile]) -> None:
    twice = [name for name, count in Counter(file.identity for file in files).items() if count > 1]
    if twice:
        problems = [Problem(f"response {name}", "the name more than once", "one") for name in twice]
        raise InputError(problems)


def _attributes(campaign: _Campaign, options: ResponseSettings) -> dict[str, Any]:
    skipped = [
        {"file": file, "reason": str(problem).removeprefix(file).lstrip(",: ")}
        for file, problem in campaign.bad
    ]
    return {
        "sample_period": options.sample_period,
        "input_unit": _unit(campaign, "input_unit", options.units.input),
        "output_unit": _unit(campaign, "output_unit", options.units.output),
        "variance_source": campaign.measured[0].variance_source,
        "rest_lines": sum(measured.rest_lines for measured in campaign.measured),
        "skipped_files": json.dumps(skipped),
    }


def _unit(campaign: _Campaign, name: str, stated: str) -> str:
    """Return the unit the study states, else the one the files do."""
    found = sorted({getattr(each, name) for each in campaign.measured} - {""})
    if len(found) > 1:
        raise InputError(Problem(f"the {name} of the files", " and ".join(found), "one unit"))
    return stated or (found[0] if found else "")


def _dataset(
    files: Sequence[LabelledFile], measured: Sequence[MeasuredResponse], folder: Path
) -> xr.Dataset:
    """Stack responses on one grid."""

    def stacked(name: str, missing: float | bool = np.nan) -> Any:
        empty = np.full(measured[0].frequency.shape, missing)
        values = [getattr(each, name) for each in measured]
        return np.stack([empty if value is None else value for value in values])[:, None, None, :]

    variables = {"frequency_response": (_DIMS, stacked("response"))}
    if measured[0].variance is not None:
        variables["frequency_response_variance"] = (_DIMS, stacked("variance"))
    if any(each.coherence is not None for each in measured):
        variables["coherence"] = (_DIMS, stacked("coherence"))
    if any(each.usable is not None for each in measured):
        variables["usable_mask"] = (_DIMS, stacked("usable", missing=True))
    data = xr.Dataset(
        variables,
        coords={
            "response": [file.identity for file in files],
            "output": [_channel(files, "output")],
            "input": [_channel(files, "input")],
            "frequency": measured[0].frequency,
        },
    )
    return data.assign_coords(response_labels(files, folder))


def _channel(files: Sequence[LabelledFile], name: str) -> str:
    found = sorted({str(file.labels.get(name, name)) for file in files})
    if len(found) > 1:
        shown = ", ".join(found)
        expected = f"one {name}; plants of several channels are not available in this version"
        raise InputError(Problem(f"the label {{{name}}}", shown, expected))
    return found[0]


def response_labels(files: Sequence[LabelledFile], folder: Path) -> dict[str, Any]:
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
    labels["source"] = ("response", [relative_to(file.path, folder) for file in files])
    return labels
