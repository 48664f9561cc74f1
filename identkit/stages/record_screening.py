"""Marks of time records: what the bench did that a response does not show."""

import json
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.grids import Gridded, datasets
from identkit.stages.record_estimate import RecordEstimate
from identkit.stages.record_signals import Tally


@dataclass(frozen=True)
class Check:
    """One thing a record is judged by.

    Attributes
    ----------
    name
        As it stands in files.
    limit
        Values above it are marked.
    says
        The sentence, with the value to be filled in.
    advice
        What to try.
    """

    name: str
    limit: float
    says: str
    advice: str


CHECKS = (
    Check("dropouts", 1e-4, "{:.2%} of the samples are missing", "check sensor and recorder"),
    Check(
        "excursions",
        1e-3,
        "{:.2%} of the samples lie beyond the linear range and were left out with their segments",
        "excite less, or hold the position tighter",
    ),
    Check(
        "saturation",
        1e-3,
        "the drive is at its limit in {:.2%} of the samples",
        "excite less; a saturated amplifier is not linear",
    ),
    Check(
        "clipping",
        1e-4,
        "the position rests at its extreme in {:.2%} of the samples",
        "check the range of the converter",
    ),
    Check(
        "non-stationary",
        3.0,
        "the power of the position varies by a factor of {:.2g} along the record",
        "look for shocks and drift, and measure again",
    ),
    Check(
        "left-out",
        0.2,
        "{:.0%} of the segments were left out",
        "measure longer, or remove what interrupts the record",
    ),
    Check(
        "weak-excitation",
        0.2,
        "the excitation is too weak at {:.0%} of the lines",
        "excite more at these lines, or average longer",
    ),
)
_FEWEST_BLOCKS = 8


def check_values(result: RecordEstimate) -> list[float]:
    """Return what each of `CHECKS` is judged by; NaN where it cannot be known."""
    tally, estimate = result.tally, result.estimate
    samples = max(tally.samples, 1)
    weak = float(np.mean(estimate.weak)) if estimate is not None else np.nan
    return [
        tally.dropouts / samples,
        tally.excursions / samples,
        tally.saturated / samples,
        _clipped(tally) / samples,
        _power_ratio(tally),
        result.left_out,
        weak,
    ]


def _clipped(tally: Tally) -> int:
    if not tally.extremes:
        return 0
    values = [value for value, _ in tally.extremes]
    ends = {min(values), max(values)}
    return sum(runs for value, runs in tally.extremes if value in ends)


def _power_ratio(tally: Tally) -> float:
    """Return the largest power of a tenth of the record over the median of the tenths."""
    if len(tally.powers) < _FEWEST_BLOCKS:
        return np.nan
    parts = np.array_split(np.array(tally.powers), min(10, len(tally.powers)))
    means = np.array([part.mean() for part in parts])
    middle = np.median(means)
    return float(np.max(means) / middle) if middle > 0.0 else np.nan


def with_marks(data: xr.Dataset, results: Sequence[RecordEstimate]) -> xr.Dataset:
    """Return responses with the marks of their records along (response, record_check)."""
    values = np.array([check_values(result) for result in results])
    limits = np.broadcast_to([check.limit for check in CHECKS], values.shape).copy()
    dims = ("response", "record_check")
    with np.errstate(invalid="ignore"):
        marked = values > limits
    return data.assign(
        record_mark=(dims, marked), record_value=(dims, values), record_limit=(dims, limits)
    ).assign_coords(record_check=[check.name for check in CHECKS])


def mark_words(part: xr.Dataset) -> list[tuple[int, str, str, str]]:
    """Return (place of the response, check, sentence, advice) of every mark of one grid."""
    found = []
    if "record_mark" in part:
        for i, k in np.argwhere(part["record_mark"].values):
            check = next(c for c in CHECKS if c.name == str(part["record_check"].values[k]))
            said = check.says.format(float(part["record_value"].values[i, k]))
            found.append((int(i), check.name, said, check.advice))
    return found


def record_sentences(responses: Gridded) -> list[str]:
    """Return one sentence with advice for every marked record; none where there are no records."""
    return [
        f"{part['response'].values[at]}: {said}; {advice}"
        for part in datasets(responses)
        for at, _, said, advice in mark_words(part)
    ]


def method_sentences(responses: Gridded) -> list[str]:
    """Return which methods were used, for how many responses, and why."""
    seen: dict[tuple[str, str], int] = {}
    for part in datasets(responses):
        if "estimator" in part:
            for pair in zip(part["estimator"].values, part["estimator_reason"].values, strict=True):
                key = (str(pair[0]), str(pair[1]))
                seen[key] = seen.get(key, 0) + 1
    return [f"{count} by {method}: {reason}" for (method, reason), count in seen.items()]


def as_json(problems: Sequence[tuple[str, str]]) -> str:
    """Return left-out files with their reasons as the attribute ``skipped_files``."""
    return json.dumps([{"file": file, "reason": reason} for file, reason in problems])
