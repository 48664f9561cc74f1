"""Hotelling's T2 for individual multivariate points, and its limits.

Sources: H. Hotelling, "Multivariate quality control", in *Techniques of Statistical Analysis*,
1947; N. D. Tracy, J. C. Young and R. L. Mason, "Multivariate control charts for individual
observations", Journal of Quality Technology 24 (1992) 88-95 (limits with an estimated covariance).
"""

import numpy as np
from scipy.stats import beta, chi2, f, ncx2

from identkit.methods.arrays import FloatArray


def hotelling_statistic(values: FloatArray, reference: FloatArray) -> FloatArray:
    """Return T2 of points against mean and covariance of reference points.

    Parameters
    ----------
    values
        (points, series).
    reference
        (reference points, series), more of them than series.
    """
    step = values - reference.mean(axis=0)
    covariance = np.atleast_2d(np.cov(reference, rowvar=False))
    return np.asarray(np.einsum("ij,ij->i", step, np.linalg.solve(covariance, step.T).T))


def known_covariance_limit(series: int, false_alarm: float) -> float:
    """Return the limit for known mean and covariance (chi-square)."""
    return float(chi2.isf(false_alarm, series))


def known_covariance_run_length(series: int, limit: float, distance: float = 0.0) -> float:
    """Return the average run length at a Mahalanobis distance of the shifted mean."""
    law = chi2(series) if distance == 0.0 else ncx2(series, distance**2)
    return float(1.0 / law.sf(limit))


def baseline_limit(series: int, points: int, false_alarm: float) -> float:
    """Return the limit for the baseline's own points (Tracy, Young and Mason 1992, phase I)."""
    scale = (points - 1.0) ** 2 / points
    return float(scale * beta.isf(false_alarm, series / 2.0, (points - series - 1.0) / 2.0))


def future_limit(series: int, points: int, false_alarm: float) -> float:
    """Return the limit for one later point (Tracy, Young and Mason 1992, phase II)."""
    scale = series * (points + 1.0) * (points - 1.0) / (points * (points - series))
    return float(scale * f.isf(false_alarm, series, points - series))
