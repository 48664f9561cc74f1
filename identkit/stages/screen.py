"""Screening: marks points and responses that deserve doubt, with value, limit and reason.

Nothing is dropped here. Points are marked for low coherence, for lying outside the band and for
missing values; responses for noise, for standing off their peers and for too few usable points.
"""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets, gather
from identkit.methods.arrays import BoolArray, FloatArray
from identkit.methods.robust_distance import median_and_scale
from identkit.stages.peers import odd_responses

MARKS = ("noise", "outlier", "too-few-points")
POINT_DIMS = ("response", "output", "input", "frequency")


def screen(
    responses: Gridded,
    *,
    band: tuple[float, float] | None = None,
    coherence_limit: float = 0.5,
    noise_limit: float = 0.3,
    outlier_limit: float = 6.0,
    fewest_points: int = 50,
) -> Gridded:
    """Mark doubtful points and responses; drop nothing.

    Outliers are judged by the robust distance of their log response from that of their peers
    (methods/robust_distance.py), tolerant of resonances that stand somewhat higher or lower.

    Parameters
    ----------
    responses
        Responses on one frequency grid or several.
    band
        Lowest and highest frequency to use, Hz; all when None.
    coherence_limit
        Points with less coherence are marked.
    noise_limit
        Largest median relative standard deviation of a response.
    outlier_limit
        Largest distance from peers, in robust standard deviations of the peers' own distances.
    fewest_points
        Fewest usable points of every channel of a response.

    Returns
    -------
    Dataset or DataTree
        On the same grids: ``usable_mask``, ``low_coherence_mask``, ``outside_band_mask``,
        ``missing_mask`` (response, output, input, frequency); ``response_mark``,
        ``response_mark_value``, ``response_mark_limit`` (response, mark). A value is NaN where
        it cannot be known: no variance, or fewer than five peers.

    Raises
    ------
    InputError
        If the band holds no measured point at all.
    """
    parts = datasets(responses)
    if band is not None:
        _refuse_empty_band(parts, band)
    masked = [_mark_points(part, band, coherence_limit) for part in parts]
    oddness = odd_responses(parts, [mask["usable_mask"] for mask in masked])
    limits = np.array([noise_limit, outlier_limit, float(fewest_points)])
    marked = [
        _mark_responses(part, mask, odd, limits)
        for part, mask, odd in zip(parts, masked, oddness, strict=True)
    ]
    for part in marked:
        part.attrs.update(
            band=list(band) if band is not None else [], coherence_limit=coherence_limit
        )
    return gather(marked)


def mark_sentences(screening: Gridded) -> list[str]:
    """Return one sentence for people about every marked response, and one on marked points."""
    parts = datasets(screening)
    sentences = [
        _sentence(str(name), str(mark), float(value), float(limit))
        for part in parts
        for name, marks, values, limits in zip(
            part["response"].values,
            part["response_mark"].values,
            part["response_mark_value"].values,
            part["response_mark_limit"].values,
            strict=True,
        )
        for mark, marked, value, limit in zip(
            part["mark"].values, marks, values, limits, strict=True
        )
        if marked
    ]
    return sentences + _point_sentences(parts)


def marked_responses(screening: Gridded, marks: Sequence[str]) -> dict[str, str]:
    """Return the responses that carry any of `marks`, each with the reason in words."""
    found: dict[str, list[str]] = {}
    for part in datasets(screening):
        chosen = part.sel(mark=[m for m in part["mark"].values if m in marks])
        for i, name in enumerate(chosen["response"].values):
            for k, mark in enumerate(chosen["mark"].values):
                if bool(chosen["response_mark"].values[i, k]):
                    value = float(chosen["response_mark_value"].values[i, k])
                    limit = float(chosen["response_mark_limit"].values[i, k])
                    found.setdefault(str(name), []).append(_reason(str(mark), value, limit))
    return {name: "; ".join(reasons) for name, reasons in found.items()}


def _refuse_empty_band(parts: Sequence[xr.Dataset], band: tuple[float, float]) -> None:
    frequency = np.concatenate([part["frequency"].values for part in parts])
    if not np.any((frequency >= band[0]) & (frequency <= band[1])):
        place = f"[responses] band, {band[0]:.6g} to {band[1]:.6g} Hz"
        found = (
            f"no point in it: the data run from {frequency.min():.6g} to {frequency.max():.6g} Hz"
        )
        raise InputError(Problem(place, found, "a band that holds measured points"))


def _mark_points(
    part: xr.Dataset, band: tuple[float, float] | None, coherence_limit: float
) -> xr.Dataset:
    measured = part["frequency_response"].transpose(*POINT_DIMS)
    missing = ~np.isfinite(measured.values)
    if "frequency_response_variance" in part:
        variance = part["frequency_response_variance"].transpose(*POINT_DIMS).values
        missing |= ~np.isfinite(variance) | (variance < 0.0)
    if "usable_mask" in part:
        missing |= ~part["usable_mask"].transpose(*POINT_DIMS).values
    low = np.zeros(missing.shape, dtype=bool)
    if "coherence" in part:
        low = part["coherence"].transpose(*POINT_DIMS).values < coherence_limit
    outside = np.zeros(missing.shape, dtype=bool)
    if band is not None:
        frequency = part["frequency"].values
        outside |= (frequency < band[0]) | (frequency > band[1])
    masks = {
        "usable_mask": ~(missing | low | outside),
        "low_coherence_mask": low,
        "outside_band_mask": outside,
        "missing_mask": missing,
    }
    return xr.Dataset({name: (POINT_DIMS, mask) for name, mask in masks.items()}, measured.coords)


def _mark_responses(
    part: xr.Dataset, masked: xr.Dataset, oddness: FloatArray, limits: FloatArray
) -> xr.Dataset:
    usable = masked["usable_mask"].values
    fewest = usable.sum(axis=-1).min(axis=(1, 2)).astype(float)
    values = np.column_stack([_median_noise(part, usable), oddness, fewest])
    marks = np.column_stack([values[:, :2] > limits[:2], values[:, 2] < limits[2]])
    dims = ("response", "mark")
    return masked.assign(
        response_mark=(dims, marks),
        response_mark_value=(dims, values),
        response_mark_limit=(dims, np.broadcast_to(limits, values.shape).copy()),
    ).assign_coords(mark=list(MARKS))


def _median_noise(part: xr.Dataset, usable: BoolArray) -> FloatArray:
    """Return the median relative standard deviation per response, of its worst channel."""
    shape = usable.shape
    if "frequency_response_variance" not in part:
        return np.full(shape[0], np.nan)
    measured = np.abs(part["frequency_response"].transpose(*POINT_DIMS).values)
    variance = part["frequency_response_variance"].transpose(*POINT_DIMS).values
    judged = usable & (measured > 0.0)
    relative = np.full(shape, np.nan)
    np.divide(np.sqrt(np.where(judged, variance, 0.0)), measured, out=relative, where=judged)
    middle = median_and_scale(relative, axis=-1)[0].reshape(shape[0], -1)
    return np.asarray(np.fmax.reduce(middle, axis=1), dtype=float)


def _sentence(name: str, mark: str, value: float, limit: float) -> str:
    return f"{name}: {_reason(mark, value, limit)}"


def _reason(mark: str, value: float, limit: float) -> str:
    if mark == "noise":
        return f"noise, median relative standard deviation {value:.2g} (limit {limit:.2g})"
    if mark == "outlier":
        return (
            f"outlier, its response stands {value:.1f} robust standard deviations off those of "
            f"its peers (limit {limit:.1f})"
        )
    return f"too few points, {value:.0f} usable (at least {limit:.0f} expected)"


def _point_sentences(parts: Sequence[xr.Dataset]) -> list[str]:
    total = sum(part["usable_mask"].size for part in parts)
    said = {
        "low_coherence_mask": "coherence below the limit",
        "outside_band_mask": "outside the band",
        "missing_mask": "missing or not a number",
    }
    counts = {name: sum(int(part[name].values.sum()) for part in parts) for name in said}
    return [
        f"{count} of {total} points marked: {said[name]}" for name, count in counts.items() if count
    ]
