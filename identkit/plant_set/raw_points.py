"""Measured points against a set, with an allowance for noise.

At one point with error E = P/P0 - 1 and noise of standard deviation sigma (scaled like E), the
point is held if (|E| - q sigma)+ <= |W|. For circular complex noise P(|e| > q sigma) = e^{-q^2}
(N. R. Goodman, Ann. Math. Statist. 34(1), 1963); q = sqrt(ln(F / alpha)) keeps the chance that
noise alone pushes any of the F points in the band beyond its allowance at alpha or less. Between
the verdicts with and without allowance nothing can be told.
"""

from dataclasses import dataclass

import numpy as np

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import (
    BoolArray,
    ComplexArray,
    FloatArray,
    IntArray,
    PlantSetFields,
)
from identkit.plant_set.pointwise import relative_error
from identkit.plant_set.reach import Surroundings

HELD, NOT_HELD, CANNOT_TELL, NO_POINTS = "held", "not held", "cannot tell", "no points"
FALSE_ALARM = 0.05
_WINDOW = 21
_FEWEST_POINTS = 5


@dataclass(frozen=True, eq=False)
class RawReach:
    """Measured responses judged at their own points; one entry per response.

    Attributes
    ----------
    verdict
        "held", "not held", "cannot tell" or "no points".
    reach, frequency
        Largest |E| / |W| and where (Hz); NaN without points.
    reach_with_allowance, frequency_with_allowance
        The same of (|E| - q sigma)+.
    used, left_out, outside_band
        Points that were judged, masked or missing, and outside the band of the set.
    """

    verdict: tuple[str, ...]
    reach: FloatArray
    frequency: FloatArray
    reach_with_allowance: FloatArray
    frequency_with_allowance: FloatArray
    used: IntArray
    left_out: IntArray
    outside_band: IntArray


def judge_points(
    contents: PlantSetFields,
    frequency: FloatArray,
    measured: ComplexArray,
    variance: FloatArray | None,
    usable: BoolArray | None = None,
    *,
    false_alarm: float = FALSE_ALARM,
) -> RawReach:
    """Judge measured responses of a scalar plant on one frequency grid.

    Parameters
    ----------
    contents
        The set.
    frequency
        (points,) Hz.
    measured
        (responses, points); NaN points are left out.
    variance
        (responses, points) E|error|^2, total of both parts; None or NaN where unknown. A response
        beyond the weight at a point of unknown variance is never called "not held" for it.
    usable
        (responses, points) points that screening lets through; None for all.
    false_alarm
        Chance that noise alone pushes a response beyond its allowance.

    Raises
    ------
    InputError
        If the plant is not scalar.
    """
    if not contents.is_scalar:
        found = f"{len(contents.outputs)} outputs and {len(contents.inputs)} inputs"
        raise InputError(Problem("raw points", found, "one of each"))
    frequency = np.asarray(frequency, dtype=float)
    inside = (frequency >= contents.band[0]) & (frequency <= contents.band[1])
    good = np.isfinite(measured) if usable is None else np.isfinite(measured) & usable
    known = np.full(measured.shape, np.nan) if variance is None else variance
    plain, sure = _reaches(contents, frequency, np.where(good, measured, 1.0), known, false_alarm)
    counted = good & inside
    plain, sure = np.where(counted, plain, -1.0), np.where(counted, sure, -1.0)
    top, sure_top = plain.max(axis=1), sure.max(axis=1)
    none = np.asarray(~counted.any(axis=1))
    return RawReach(
        verdict=tuple(_verdict(*each) for each in zip(top, sure_top, none.tolist(), strict=True)),
        reach=np.where(none, np.nan, top),
        frequency=np.where(none, np.nan, frequency[plain.argmax(axis=1)]),
        reach_with_allowance=np.where(none, np.nan, sure_top),
        frequency_with_allowance=np.where(none, np.nan, frequency[sure.argmax(axis=1)]),
        used=counted.sum(axis=1),
        left_out=(~good & inside).sum(axis=1),
        outside_band=np.full(len(measured), int(np.sum(~inside))),
    )


def neighbour_variance(
    frequency: FloatArray, measured: ComplexArray, usable: BoolArray | None = None
) -> FloatArray:
    """Return a variance read off a response itself, where none was measured and nothing fitted.

    How far each usable point lies off the line through its usable neighbours, relative to its
    size, as a median over 21 points, or over all where that is larger: |error|^2 of circular
    Gaussian noise is exponential, so its median is ln 2 times its mean. Curvature between the
    points counts as noise, never the reverse.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    measured
        (points,); NaN points are left out.
    usable
        (points,) points to use; None for all.

    Returns
    -------
    FloatArray
        (points,) E|error|^2, total of both parts; NaN at points left out, and everywhere where
        fewer than five are usable.
    """
    good = np.isfinite(measured) if usable is None else np.isfinite(measured) & usable
    variance = np.full(measured.shape, np.nan)
    if good.sum() < _FEWEST_POINTS:
        return variance
    hertz, value = frequency[good], measured[good]
    share = (hertz[1:-1] - hertz[:-2]) / (hertz[2:] - hertz[:-2])
    off = value[1:-1] - (1.0 - share) * value[:-2] - share * value[2:]
    square = np.abs(off / value[1:-1]) ** 2 / (1.0 + share**2 + (1.0 - share) ** 2)
    padded = np.pad(square, (_WINDOW // 2 + 1, _WINDOW // 2 + 1), constant_values=np.nan)
    windows = np.lib.stride_tricks.sliding_window_view(padded, _WINDOW)
    level = np.maximum(np.nanmedian(windows, axis=1), np.median(square)) / np.log(2.0)
    variance[good] = level * np.abs(value) ** 2
    return variance


def _reaches(
    contents: PlantSetFields,
    frequency: FloatArray,
    measured: ComplexArray,
    variance: FloatArray,
    false_alarm: float,
) -> tuple[FloatArray, FloatArray]:
    """Return |E| / |W| and (|E| - q sigma)+ / |W|, both (responses, points)."""
    nominal, left, right = (part[:, 0, 0] for part in Surroundings(contents).at(frequency))
    weight = np.abs(left * right)
    error = np.abs(relative_error(contents.form, measured, nominal))
    per_plant = {
        "additive": np.ones_like(measured),
        "inverse-multiplicative": nominal / measured**2,
    }.get(contents.form, np.broadcast_to(1.0 / nominal, measured.shape))
    low, high = contents.band
    points = max(int(np.sum((frequency >= low) & (frequency <= high))), 1)
    allowance = np.sqrt(np.log(points / false_alarm)) * np.sqrt(variance) * np.abs(per_plant)
    # Unknown noise may be anything: with allowance such a point proves nothing.
    allowance = np.where(np.isfinite(allowance), allowance, np.inf)
    return error / weight, np.maximum(error - allowance, 0.0) / weight


def _verdict(plain: float, with_allowance: float, none: bool) -> str:
    if none:
        return NO_POINTS
    if plain <= 1.0:
        return HELD
    return NOT_HELD if with_allowance > 1.0 else CANNOT_TELL
