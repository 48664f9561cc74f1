"""When a straight trend will cross a level, with its interval.

Source: E. C. Fieller, "Some problems in interval estimation", Journal of the Royal Statistical
Society B 16 (1954) 175-185 (interval of a ratio of normal estimates). An extrapolation: it rests on
the trend staying what it is.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import t

from identkit.methods.arrays import FloatArray


@dataclass(frozen=True)
class TrendCrossing:
    """A straight line through points and where it meets a level.

    Attributes
    ----------
    slope, slope_standard_error
        Per unit of time.
    rising_chance
        Chance of a slope as high from points without a trend.
    level_now, deviation
        Of the line at the last time; of a point around the line.
    crossing
        Time at which the line meets the level; NaN where it does not rise.
    low, high
        Interval of that; infinite on the side on which nothing can be said.
    """

    slope: float
    slope_standard_error: float
    rising_chance: float
    level_now: float
    deviation: float
    crossing: float
    low: float
    high: float


def trend_crossing(
    time: FloatArray,
    values: FloatArray,
    level: float,
    *,
    confidence: float = 0.95,
    margin: float = 0.0,
    inflation: float = 1.0,
) -> TrendCrossing | None:
    """Fit a line by least squares and extrapolate it to a level (Fieller 1954).

    Parameters
    ----------
    time, values
        (points,) finite.
    level
        Level to meet.
    confidence
        Of the interval.
    margin
        In standard deviations of a point: the line plus so many must meet the level, so that 0
        asks for the mean, 1.645 for one point in twenty.
    inflation
        Variance of a mean over that of a mean of independent points; above 1 for points with
        memory.

    Returns
    -------
    TrendCrossing or None
        None for fewer than four points or a single time.
    """
    count = len(values)
    if count < 4 or np.ptp(time) == 0.0:
        return None
    centre = float(time.mean())
    spread = float(np.sum((time - centre) ** 2))
    slope = float((time - centre) @ values) / spread
    mean = float(values.mean())
    residual = values - mean - slope * (time - centre)
    freedom = count - 2
    deviation = float(np.sqrt(residual @ residual / freedom))
    error = deviation * np.sqrt(inflation / spread)
    missing = level - margin * deviation - mean
    low, high = _fieller(
        missing, inflation * deviation**2 / count, slope, error**2, freedom, confidence
    )
    return TrendCrossing(
        slope,
        float(error),
        float(t.sf(slope / error, freedom)) if error > 0.0 else float(slope <= 0.0),
        mean + slope * (float(time.max()) - centre),
        deviation,
        centre + missing / slope if slope > 0.0 else float("nan"),
        centre + low,
        centre + high,
    )


def _fieller(
    over: float,
    over_variance: float,
    under: float,
    under_variance: float,
    freedom: int,
    conf: float,
) -> tuple[float, float]:
    """Return the interval of over / under for independent estimates, the denominator positive."""
    q = float(t.isf(0.5 * (1.0 - conf), freedom)) ** 2
    a = under**2 - q * under_variance
    root = over**2 * q * under_variance + q * over_variance * a
    if a <= 0.0 or under <= 0.0:
        return float("-inf"), float("inf")
    half = np.sqrt(max(root, 0.0))
    return float((over * under - half) / a), float((over * under + half) / a)
