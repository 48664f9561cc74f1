"""Every point judged by those before it, as exact standard normal scores.

Sources: R. L. Brown, J. Durbin and J. M. Evans, "Techniques for testing the constancy of regression
relationships over time", Journal of the Royal Statistical Society B 37 (1975) 149-192 (recursive
residuals); D. M. Hawkins, "Self-starting CUSUM charts for location and scale", The Statistician 36
(1987) 299-315 (their normal scores on charts); D. M. Hawkins and E. M. Maboudou-Tchao,
"Self-starting multivariate exponentially weighted moving average control charting", Technometrics
49 (2007) 199-209 (several series, each regressed on those before it).

Mean and standard deviation are estimated from the points before, and the scores allow for it: in
control they are independent standard normal whatever the number of points, so limits for known
parameters hold, also after a short baseline. Applies to normal points; learns from shifted points
too unless they are named.
"""

import numpy as np
from scipy.stats import norm, t

from identkit.methods.arrays import BoolArray, FloatArray

_HIGHEST = 37.0  # normal scores beyond it have no chance in double precision


def recursive_scores(
    values: FloatArray,
    regressors: FloatArray,
    relative_variance: FloatArray,
    baseline: BoolArray,
    learns: BoolArray,
) -> FloatArray:
    """Return the normal score of every point that is not of the baseline.

    Parameters
    ----------
    values
        (points,) in the order in which they came; NaN points have no score.
    regressors
        (points, effects) a column of ones for a constant mean.
    relative_variance
        (points,) known ratio of each point's variance to a common unknown one.
    baseline
        (points,) points that teach the model before the first is judged.
    learns
        (points,) later points that teach it after they have been judged.

    Returns
    -------
    FloatArray
        (points,) NaN in the baseline and where there are too few points before.
    """
    usable = np.isfinite(values) & np.isfinite(regressors).all(axis=1)
    start = baseline & usable
    scores = np.full(len(values), np.nan)
    if start.sum() <= regressors.shape[1] + 1:
        return scores
    model = _Weighted(values[start], regressors[start], relative_variance[start])
    for at in np.flatnonzero(usable & ~start & ~baseline):
        residual, leverage = model.judge(values[at], regressors[at], relative_variance[at])
        scores[at] = normal_score(residual / model.deviation, model.freedom)
        if learns[at]:
            model.learn(residual, regressors[at], leverage)
    return scores


def baseline_scores(
    values: FloatArray,
    regressors: FloatArray,
    relative_variance: FloatArray,
    members: BoolArray,
    widening: float = 1.0,
) -> FloatArray:
    """Return the normal score of every point against the members other than itself.

    The scores of members (externally studentised residuals) are exact one by one but not
    independent of each other.

    Parameters
    ----------
    values, regressors, relative_variance
        As for `recursive_scores`.
    members
        (points,) that teach the model.
    widening
        True deviation over that of the members, where they were chosen for lying close together.
    """
    usable = np.isfinite(values) & np.isfinite(regressors).all(axis=1)
    scores = np.full(len(values), np.nan)
    inside = members & usable
    freedom = int(inside.sum()) - regressors.shape[1]
    if freedom < 2:
        return scores
    root = np.sqrt(relative_variance)
    scaled, target = regressors / root[:, None], values / root
    inverse = np.linalg.pinv(scaled[inside].T @ scaled[inside])
    residual = target - scaled @ (inverse @ (scaled[inside].T @ target[inside]))
    leverage = np.einsum("ij,jk,ik->i", scaled, inverse, scaled)
    squares = float(np.sum(residual[inside] ** 2))
    # A member is judged by the others: its own share is taken out of fit and variance.
    own = np.where(inside, np.maximum(1.0 - leverage, np.finfo(float).eps), 1.0 + leverage)
    left = np.where(inside, squares - residual**2 / own, squares)
    degrees = np.where(inside, freedom - 1, freedom)
    least = np.finfo(float).eps * squares + np.finfo(float).tiny
    deviation = np.sqrt(np.maximum(left, least) / degrees)
    ratio = residual / (widening * deviation * np.sqrt(own))
    tail = norm.isf(np.maximum(t.sf(np.abs(ratio), degrees), norm.sf(_HIGHEST)))
    return np.asarray(np.where(usable, np.copysign(tail, ratio), np.nan), dtype=float)


def joint_scores(
    values: FloatArray, relative_variance: FloatArray, baseline: BoolArray, learns: BoolArray
) -> FloatArray:
    """Return uncorrelated scores of several series, each given the series before it.

    Parameters
    ----------
    values, relative_variance
        (points, series).
    baseline, learns
        (points,) as for `recursive_scores`; the baseline must outnumber the series by two.

    Returns
    -------
    FloatArray
        (points, series) independent standard normal in control.
    """
    ones = np.ones((len(values), 1))
    columns = [
        recursive_scores(
            values[:, k],
            np.concatenate([ones, values[:, :k]], axis=1),
            relative_variance[:, k],
            baseline & np.isfinite(values).all(axis=1),
            learns,
        )
        for k in range(values.shape[1])
    ]
    return np.stack(columns, axis=1)


def normal_score(ratio: float, freedom: int) -> float:
    """Return the standard normal value as likely to be exceeded as a Student t value."""
    tail = norm.isf(max(t.sf(abs(ratio), freedom), norm.sf(_HIGHEST)))
    return float(np.copysign(tail, ratio))


class _Weighted:
    """Weighted least squares that takes one more point at a time."""

    def __init__(
        self, values: FloatArray, regressors: FloatArray, relative_variance: FloatArray
    ) -> None:
        root = np.sqrt(relative_variance)
        scaled = regressors / root[:, None]
        self._inverse = np.linalg.pinv(scaled.T @ scaled)
        self._effects = self._inverse @ (scaled.T @ (values / root))
        self._squares = float(np.sum((values / root - scaled @ self._effects) ** 2))
        self.freedom = int(len(values) - regressors.shape[1])

    @property
    def deviation(self) -> float:
        return float(np.sqrt(max(self._squares / self.freedom, np.finfo(float).tiny)))

    def judge(self, value: float, row: FloatArray, variance: float) -> tuple[float, float]:
        """Return the residual scaled to the common variance, and the scale's root."""
        root = float(np.sqrt(variance + row @ self._inverse @ row))
        return (value - float(row @ self._effects)) / root, root

    def learn(self, residual: float, row: FloatArray, root: float) -> None:
        gain = self._inverse @ row / root
        self._effects = self._effects + gain * residual
        self._inverse = self._inverse - np.outer(gain, gain)
        self._squares += residual**2
        self.freedom += 1
