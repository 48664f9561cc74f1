r"""Means and trends of a nested design with one unit left out, its variances kept.

.. math:: \hat\beta_{(u)} = \Bigl(\sum_{v \ne u} X_v^T V_v^{-1} X_v\Bigr)^{-1}
   \sum_{v \ne u} X_v^T V_v^{-1} y_v

Units are independent, so the normal equations are sums over units and leaving one out takes its
term away. Source: R. Christensen, L. M. Pearson and W. Johnson, "Case-deletion diagnostics for
mixed models", Technometrics 34 (1992) 38-45 (variance components fixed while cases are deleted).
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray

_LEAST_SHARE = 1e-9


@dataclass(frozen=True)
class NestedMeans:
    """Generalised least-squares estimates at given variances.

    Attributes
    ----------
    effects, covariance
        (effects,), (effects, effects) from all units.
    without_unit
        (units, effects) from all units but one.
    """

    effects: FloatArray
    covariance: FloatArray
    without_unit: FloatArray


def nested_means(
    value: FloatArray,
    fixed: FloatArray,
    unit: IntArray,
    head: IntArray,
    known_variance: FloatArray,
    variance: FloatArray,
) -> NestedMeans:
    """Estimate the fixed effects of a nested design, with and without each unit.

    Parameters
    ----------
    value
        (observations,).
    fixed
        (observations, effects) regressors of full column rank.
    unit, head
        (observations,) integer labels, units from 0; heads of different units differ.
    known_variance
        (observations,) variance of the measurement error.
    variance
        (3,) unit, head-within-unit and residual variance; NaN counts as 0.

    Returns
    -------
    NestedMeans
        One row for every unit number up to the largest. An effect that only the unit left out
        shows stays at its estimate from all units.

    Notes
    -----
    Variances are not estimated again: with few units, one of which decides the spread, the
    estimate without it would weigh the observations a little differently.
    """
    spread = np.nan_to_num(np.asarray(variance, dtype=float))
    units = int(unit.max()) + 1
    effects = fixed.shape[1]
    information = np.zeros((units, effects, effects))
    right = np.zeros((units, effects))
    for number in range(units):
        mine = unit == number
        covariance = _covariance(head[mine], known_variance[mine], spread)
        solved = np.linalg.solve(covariance, np.column_stack([fixed[mine], value[mine]]))
        information[number] = fixed[mine].T @ solved[:, :effects]
        right[number] = fixed[mine].T @ solved[:, effects]
    total, whole = information.sum(axis=0), right.sum(axis=0)
    inverse = np.linalg.inv(total)
    estimate = inverse @ whole
    others = [_solved(total - information[u], whole - right[u], estimate) for u in range(units)]
    return NestedMeans(estimate, inverse, np.array(others))


def _covariance(head: IntArray, known: FloatArray, variance: FloatArray) -> FloatArray:
    total = float(variance.sum() + known.max(initial=0.0))
    if total <= 0.0:
        return np.eye(len(head))
    same = head[:, None] == head[None, :]
    # Where nothing but shared deviations is left, equal observations must not make it singular.
    plain = np.diag(np.maximum(known + variance[2], _LEAST_SHARE * total))
    return np.asarray(plain + variance[1] * same + variance[0], dtype=float)


def _solved(information: FloatArray, right: FloatArray, otherwise: FloatArray) -> FloatArray:
    """Solve the normal equations; what they do not determine is taken from `otherwise`."""
    step = right - information @ otherwise
    scale = np.sqrt(np.maximum(np.diag(information), 0.0))
    scale = np.where(scale > 0.0, scale, 1.0)
    alike = information / np.outer(scale, scale)
    return np.asarray(otherwise + np.linalg.pinv(alike, rcond=1e-9) @ (step / scale) / scale)
