"""Variance of the points of a response: estimated where none was measured, and unbiased weights.

Where no variance is given, v = (alpha |P|^2 + beta) times a slowly varying factor: a constant
relative part, a floor, and what the residuals show along the frequency axis, all by medians so
that a missed resonance does not hide itself. |error|^2 of circular Gaussian noise is exponential:
its median is ln 2 times its mean. Fewer than 15 points cannot tell: they share one variance.

Where a variance is given that follows the measured magnitude point by point (as one derived from
coherence does), points that happen to be small get too much weight and the fit is biased low. It
is then scaled from the measured to the modelled magnitude, once. Whether it does is read off the
data: the regression of the wiggles of ln v on those of ln |measured|^2.

A variance estimated from few averages scatters from point to point, which costs efficiency and
makes intervals too short. Where the residuals do not share the wiggles of the stated variance
(regression of one on the other), it is smoothed along the frequency axis; single points that
stand far out keep their own.

Source: common practice in response estimation; the bias of data-dependent weights is discussed by
R. Pintelon & J. Schoukens, *System Identification: A Frequency Domain Approach*, 2nd ed., 2012.
"""

from collections.abc import Callable

import numpy as np
from scipy.ndimage import median_filter, uniform_filter1d

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_solution import Solution, fitted_response

LN2 = float(np.log(2.0))
RELATIVE_FLOOR = 1e-9
LARGEST_CORRECTION = 4.0
SMALLEST_WINDOW = 15
SMALLEST_WIGGLE = 0.02
FLOOR_TRIALS = 120
LARGEST_BINS = 48
LARGEST_EXCESS = 8.0


def start_variance(frequency: FloatArray, response: ComplexArray) -> FloatArray:
    """Return a first variance from how far each point lies off the line through its neighbours."""
    points = frequency.size
    if points < 8:
        return np.asarray(1e-4 * np.abs(response) ** 2, dtype=float)
    share = (frequency[1:-1] - frequency[:-2]) / (frequency[2:] - frequency[:-2])
    off = response[1:-1] - (1.0 - share) * response[:-2] - share * response[2:]
    gain = 1.0 + share**2 + (1.0 - share) ** 2
    relative = np.abs(off) ** 2 / gain / _power(response)[1:-1]
    level = median_filter(np.pad(relative, 1, mode="edge"), _window(points), mode="reflect") / LN2
    return np.asarray(np.maximum(level, RELATIVE_FLOOR**2) * _power(response), dtype=float)


def updated_variance(
    solution: Solution, response: ComplexArray, variance: FloatArray, estimated: bool
) -> FloatArray:
    """Return the variance to use next, given a fit.

    Parameters
    ----------
    solution
        A fit of the response with `variance`.
    response
        (points,) measured.
    variance
        (points,) variance used in the fit.
    estimated
        Whether it was estimated; then it is estimated afresh from the residuals.
    """
    model = fitted_response(solution)
    error = np.abs(response - model) ** 2
    if estimated:
        return _from_residuals(error, model)
    return _without_scatter(_model_based(variance, response, model), error, model)


def _from_residuals(error: FloatArray, model: ComplexArray) -> FloatArray:
    power = _power(model)
    if error.size < SMALLEST_WINDOW:
        return np.full(error.size, max(float(np.mean(error)), RELATIVE_FLOOR**2 * power.max()))
    relative, floor = _relative_and_floor(error, power, _mean_by_median)
    shape = relative * power + floor
    level = median_filter(error / shape, _window(error.size), mode="reflect") / LN2
    level = uniform_filter1d(level, _window(error.size), mode="reflect")
    return np.asarray(shape * np.maximum(level, 1e-3), dtype=float)


def _median(values: FloatArray) -> float:
    return float(np.median(values))


def _mean_by_median(error: FloatArray) -> float:
    return float(np.median(error)) / LN2


def _relative_and_floor(
    error: FloatArray, power: FloatArray, mean_of: Callable[[FloatArray], float]
) -> tuple[float, float]:
    """Split the error in a part relative to power and a constant: bins of equal power, by logs."""
    bins = np.array_split(np.argsort(power), max(2, min(LARGEST_BINS, error.size // 25)))
    mean = np.array([mean_of(error[part]) for part in bins])
    level = np.array([np.median(power[part]) for part in bins])
    ratios = np.concatenate([[0.0], np.geomspace(level[0] / 10.0, level[-1] * 10.0, FLOOR_TRIALS)])
    off = np.log(np.maximum(mean, 1e-300)) - np.log(level + ratios[:, None])
    best = int(np.argmin(np.var(off, axis=1)))
    relative = float(np.exp(np.mean(off[best])))
    return max(relative, RELATIVE_FLOOR**2), relative * float(ratios[best])


def _model_based(variance: FloatArray, response: ComplexArray, model: ComplexArray) -> FloatArray:
    wiggle = np.log(_power(response) / _power(model))
    rough = np.diff(np.log(np.maximum(variance, 1e-300)))
    follows = np.diff(wiggle)
    energy = float(follows @ follows)
    if energy == 0.0:
        return variance
    slope = float(rough @ follows) / energy
    error = float(np.std(rough - slope * follows)) / energy**0.5
    if slope < max(0.5, 4.0 * error):
        return variance
    factor = np.clip(np.exp(-wiggle), 1.0 / LARGEST_CORRECTION, LARGEST_CORRECTION)
    return np.asarray(variance * factor, dtype=float)


def _without_scatter(variance: FloatArray, error: FloatArray, model: ComplexArray) -> FloatArray:
    """Smooth a variance whose wiggles are not in the residuals: they are its own error."""
    if error.size < 4 * SMALLEST_WINDOW:
        return variance
    smooth = _smooth(variance, _power(model))
    ratio = variance / smooth
    away = np.abs(np.log(ratio))
    if float(np.median(away)) < SMALLEST_WIGGLE:
        return variance
    ordinary = away < 5.0 * np.median(away)
    wiggle = ratio[ordinary] / np.mean(ratio[ordinary]) - 1.0
    excess = (error / smooth)[ordinary]
    excess = np.minimum(excess / max(float(np.mean(excess)), 1e-300), LARGEST_EXCESS) - 1.0
    if float(wiggle @ excess) / float(wiggle @ wiggle) > 0.5:
        return variance
    return np.where(ordinary, smooth, variance)


def _smooth(variance: FloatArray, power: FloatArray) -> FloatArray:
    """Return relative part and floor of a variance, times its slow variation."""
    relative, floor = _relative_and_floor(variance, power, _median)
    shape = relative * power + floor
    ratio = variance / shape
    typical = median_filter(ratio, _window(ratio.size), mode="reflect")
    ratio = np.clip(ratio, typical / 4.0, typical * 4.0)
    return np.asarray(
        shape * uniform_filter1d(ratio, _window(ratio.size), mode="reflect"), dtype=float
    )


def _power(response: ComplexArray) -> FloatArray:
    power = np.abs(response) ** 2
    floor = 1e-24 * max(float(np.max(power, initial=0.0)), 1e-300)
    return np.asarray(np.maximum(power, floor), dtype=float)


def _window(points: int) -> int:
    return max(SMALLEST_WINDOW, 2 * (points // 24) + 1)
