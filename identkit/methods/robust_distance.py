"""Robust location, scale and distance: what is usual among peers, and how far one stands off.

Sources: F. R. Hampel, "The influence curve and its role in robust estimation", Journal of the
American Statistical Association 69 (1974) 383-393 (median absolute deviation); P. J. Rousseeuw
and C. Croux, "Alternatives to the median absolute deviation", Journal of the American
Statistical Association 88 (1993) 1273-1283 (its consistency factor); P. K. Sen, "Estimates of
the regression coefficient based on Kendall's tau", Journal of the American Statistical
Association 63 (1968) 1379-1389 (slope); J. Serra, *Image Analysis and Mathematical Morphology*,
1982 (dilation of the usual range by a sideways allowance).
"""

import warnings

import numpy as np

from identkit.methods.arrays import FloatArray

MAD_TO_SIGMA = 1.4826022185056018  # 1 / Phi^-1(3/4)


def median_and_scale(value: FloatArray, axis: int = 0) -> tuple[FloatArray, FloatArray]:
    """Return median and scaled median absolute deviation (Hampel 1974), NaN left out.

    Parameters
    ----------
    value
        Samples along `axis`.
    axis
        Axis to go over.

    Returns
    -------
    tuple of FloatArray
        Median, and 1.4826 times the median absolute deviation: the standard deviation of a
        normal sample. Both NaN where every sample is NaN.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # an all-NaN column is a NaN answer
        centre = np.nanmedian(value, axis=axis, keepdims=True)
        scale = MAD_TO_SIGMA * np.nanmedian(np.abs(value - centre), axis=axis)
    return np.squeeze(centre, axis=axis), np.asarray(scale, dtype=float)


def median_slope(x: FloatArray, y: FloatArray, most_pairs: int = 100_000) -> float:
    """Return the median of the slopes between pairs of points (Sen 1968).

    Parameters
    ----------
    x, y
        (points,) finite values; pairs of equal x are left out.
    most_pairs
        Pairs used at most; beyond that an evenly spaced selection of offsets is taken.

    Returns
    -------
    float
        Slope in y per x; 0 where all x are equal.
    """
    order = np.argsort(x, kind="stable")
    x, y = x[order], y[order]
    count = len(x)
    offsets = np.arange(1, count)
    if count * (count - 1) // 2 > most_pairs:
        offsets = np.unique(np.linspace(1, count - 1, max(most_pairs // count, 1)).astype(int))
    run = np.concatenate([x[k:] - x[:-k] for k in offsets]) if count > 1 else np.zeros(0)
    rise = np.concatenate([y[k:] - y[:-k] for k in offsets]) if count > 1 else np.zeros(0)
    apart = run > 0.0
    return float(np.median(rise[apart] / run[apart])) if apart.any() else 0.0


def dilate(value: FloatArray, cells: int) -> FloatArray:
    """Return the largest value within `cells` places along the last axis (Serra 1982).

    NaN places are skipped; a place with only NaN around it stays NaN.
    """
    from scipy.ndimage import maximum_filter1d

    filled = np.where(np.isnan(value), -np.inf, value)
    widest = maximum_filter1d(filled, 2 * cells + 1, axis=-1, mode="nearest")
    return np.where(np.isneginf(widest), np.nan, widest)


def distance_from_peers(
    curves: FloatArray,
    peers: FloatArray,
    error: FloatArray,
    *,
    sideways: int,
    usual: float = 3.0,
    least_scale: float = 1e-3,
) -> FloatArray:
    """Return how far each curve runs outside what its peers show.

    The usual range at each place is median +- `usual` scaled median absolute deviations of the
    peers (Hampel 1974), dilated sideways so that a feature may stand a little to the left or
    right (Serra 1982). The distance is the root mean square, over places, of the excess over
    that range and over `usual` errors of the curve itself, in units of the scale averaged over
    places.

    Parameters
    ----------
    curves
        (curves, places) values to judge; NaN where unknown.
    peers
        (peers, places) values of the peers.
    error
        (curves, places) standard deviation of the curves' own error.
    sideways
        Places a feature may be off to either side.
    usual
        Half width of the usual range in scales.
    least_scale
        Smallest scale, in the unit of the curves.

    Returns
    -------
    FloatArray
        (curves,) distance, 0 when inside everywhere; NaN for a curve without values.

    Notes
    -----
    Needs five or more peers to mean anything; up to half of them may be odd themselves.
    """
    centre, scale = median_and_scale(peers)
    scale = np.maximum(scale, least_scale)
    upper = dilate(centre + usual * scale, sideways)
    lower = -dilate(usual * scale - centre, sideways)
    excess = np.maximum(np.maximum(curves - upper, lower - curves) - usual * error, 0.0)
    typical = float(np.sqrt(np.nanmean(scale**2)))
    known = np.isfinite(excess)
    square = np.where(known, excess, 0.0) ** 2
    count = known.sum(axis=1)
    mean = square.sum(axis=1) / np.maximum(count, 1)
    return np.where(count > 0, np.sqrt(mean) / typical, np.nan)
