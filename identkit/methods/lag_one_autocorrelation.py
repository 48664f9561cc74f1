"""Whether each point remembers the one before it, and how to chart what it adds.

Sources: R. L. Anderson, "Distribution of the serial correlation coefficient", Annals of
Mathematical Statistics 13 (1942) 1-13 (test); M. G. Kendall, "Note on bias in the estimation of
autocorrelation", Biometrika 41 (1954) 403-404 (bias); L. C. Alwan and H. V. Roberts, "Time-series
modeling for statistical process control", Journal of Business and Economic Statistics 6 (1988)
87-95 (charts of residuals).
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from identkit.methods.arrays import FloatArray

_LEAST_POINTS = 8
_HIGHEST = 0.98


@dataclass(frozen=True)
class Autocorrelation:
    """Correlation of neighbouring points.

    Attributes
    ----------
    value
        Lag-1 autocorrelation, its bias taken out; NaN for too few points.
    chance
        Chance of a value as high from independent points.
    points
        How many it rests on.
    """

    value: float
    chance: float
    points: int

    @property
    def inflation(self) -> float:
        """Variance of a mean over that of a mean of independent points, many points."""
        rho = self.value if np.isfinite(self.value) else 0.0
        return (1.0 + rho) / (1.0 - rho)


def lag_one_autocorrelation(values: FloatArray) -> Autocorrelation:
    """Estimate and test the correlation of neighbouring points against independence.

    Parameters
    ----------
    values
        (points,) in order; NaN points are skipped.

    Notes
    -----
    The test is one-sided: only positive memory makes limits for independent points too tight. A
    step or trend in the points looks like memory; give it points without one.
    """
    known = values[np.isfinite(values)]
    count = len(known)
    if count < _LEAST_POINTS or np.ptp(known) == 0.0:
        return Autocorrelation(float("nan"), 1.0, count)
    step = known - known.mean()
    raw = float(step[1:] @ step[:-1] / (step @ step))
    # Anderson 1942: mean -1/(n-1), variance near (n-2)^2/(n-1)^3 under independence.
    deviation = (count - 2.0) / (count - 1.0) ** 1.5
    chance = float(norm.sf((raw + 1.0 / (count - 1.0)) / deviation))
    unbiased = raw + (1.0 + 3.0 * raw) / count
    return Autocorrelation(float(np.clip(unbiased, -_HIGHEST, _HIGHEST)), chance, count)
