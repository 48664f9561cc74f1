r"""Variance components of a two-stage nested design by restricted maximum likelihood.

.. math:: y_i = x_i^T \beta + u_{unit(i)} + v_{head(i)\,in\,unit(i)} + e_i + m_i

with unit, head-within-unit and residual deviations of unknown variance and a measurement error
m_i of *known* variance, one per observation.

Sources: H. D. Patterson and R. Thompson, "Recovery of inter-block information when block sizes
are unequal", Biometrika 58 (1971) 545-554 (restricted likelihood); A. R. Gilmour, R. Thompson
and B. R. Cullis, "Average information REML", Biometrics 51 (1995) 1440-1450 (information
matrix); C. R. Henderson, "Best linear unbiased estimation and prediction under a selection
model", Biometrics 31 (1975) 423-447 (predicted deviations).
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray

COMPONENTS = ("unit", "head", "residual")
_MOST_ITERATIONS = 500


@dataclass(frozen=True)
class VarianceComponents:
    """Fixed effects and variance components of one quantity.

    Attributes
    ----------
    effects, effect_covariance
        (effects,), (effects, effects) generalised least-squares estimates and covariance.
    variance
        (3,) unit, head within unit, residual; NaN where the design cannot tell.
    variance_standard_error
        (3,) from the average information; NaN where the estimate is zero or cannot be told.
    unit_effect
        (units,) best linear unbiased predictions of the unit deviations; 0 where not estimated.
    restricted_log_likelihood
        At the estimates, up to a constant of the design.
    converged
        Whether the optimiser settled.
    """

    effects: FloatArray
    effect_covariance: FloatArray
    variance: FloatArray
    variance_standard_error: FloatArray
    unit_effect: FloatArray
    restricted_log_likelihood: float
    converged: bool


@dataclass(frozen=True)
class _Design:
    """Observations sorted by unit and head, and where the groups start."""

    data: FloatArray  # (n, effects + 1): X beside y
    known: FloatArray  # (n,)
    head_of: IntArray  # (n,) head-within-unit group of each observation
    unit_of: IntArray  # (n,) unit of each observation
    unit_of_head: IntArray  # (groups,)
    head_starts: IntArray  # (groups,) first observation of each head-within-unit group
    unit_starts: IntArray  # (units,) first observation of each unit
    unit_starts_in_heads: IntArray  # (units,) first group of each unit


@dataclass(frozen=True)
class _Inverse:
    """The inverse covariance in factored form at given variances."""

    weight: FloatArray  # (n,) 1 / diagonal
    head_shrink: FloatArray  # (groups,) v / (1 + v a)
    head_sum: FloatArray  # (groups,) 1' A^-1 1
    head_scale: FloatArray  # (groups,) 1 / (1 + v a)
    unit_shrink: FloatArray  # (units,)
    unit_sum: FloatArray  # (units,) 1' A^-1 1
    log_determinant: float


def restricted_likelihood_fit(
    value: FloatArray,
    fixed: FloatArray,
    unit: IntArray,
    head: IntArray,
    known_variance: FloatArray,
) -> VarianceComponents:
    """Estimate nested variance components by restricted maximum likelihood.

    Patterson and Thompson (1971), with a known measurement variance added to every
    observation's own diagonal so that it is not counted as spread. Variances are kept at or
    above zero. Components that the design cannot separate are given to the coarser one: with
    one observation per head everything below the unit is "head", with one per unit everything
    is "unit". With a single unit only the residual is estimated.

    Parameters
    ----------
    value
        (observations,) the quantity, finite.
    fixed
        (observations, effects) regressors of full column rank.
    unit, head
        (observations,) integer labels of unit and of head; heads of different units differ.
    known_variance
        (observations,) variance of the measurement error, in the square of the value's unit.

    Returns
    -------
    VarianceComponents
        Estimates with standard errors.

    Raises
    ------
    ValueError
        If there are no more observations than effects or the regressors are rank deficient.

    Notes
    -----
    One evaluation costs O(observations x effects^2): the covariance is inverted unit by unit
    with two nested rank-one updates. Standard errors of variances near zero are not reliable.
    """
    design, units = _arrange(value, fixed, unit, head, known_variance)
    free = estimable_components(unit, head)
    start, scale = _start(design, free)
    variance, likelihood, converged = _maximise(design, free, start, scale)
    return _summary(design, units, free, variance, likelihood, converged)


def estimable_components(unit: IntArray, head: IntArray) -> tuple[bool, bool, bool]:
    """Return which of unit, head-within-unit and residual variance the labels can tell apart."""
    observations = len(unit)
    units = len(np.unique(unit))
    groups = len(np.unique(np.stack([unit, head]), axis=1).T)
    if units < 2:
        return False, False, True
    return True, groups > units, observations > groups


def _arrange(
    value: FloatArray,
    fixed: FloatArray,
    unit: IntArray,
    head: IntArray,
    known_variance: FloatArray,
) -> tuple[_Design, int]:
    observations, effects = fixed.shape
    if observations <= effects:
        raise ValueError(f"{observations} observations for {effects} fixed effects")
    if np.linalg.matrix_rank(fixed) < effects:
        raise ValueError(f"the {effects} fixed effects are not independent")
    order = np.lexsort((head, unit))
    unit_of = np.unique(unit[order], return_inverse=True)[1]
    pair = np.stack([unit[order], head[order]])
    pairs, head_of = np.unique(pair, axis=1, return_inverse=True)
    unit_of_head = np.unique(pairs[0], return_inverse=True)[1]
    data = np.column_stack([fixed, value])[order].astype(float)
    known = np.asarray(known_variance, dtype=float)[order]
    head_index = np.asarray(head_of, dtype=np.int64).reshape(-1)
    starts = [_starts(group) for group in (head_index, unit_of, unit_of_head)]
    design = _Design(data, known, head_index, unit_of, unit_of_head, *starts)
    return design, int(unit_of.max()) + 1


def _starts(group: IntArray) -> IntArray:
    """Return where each group starts; groups come in ascending order and none is empty."""
    return np.searchsorted(group, np.arange(int(group[-1]) + 1))


def _group_sum(rows: FloatArray, starts: IntArray) -> FloatArray:
    return np.asarray(np.add.reduceat(rows, starts, axis=0), dtype=float)


def _invert(design: _Design, variance: FloatArray) -> _Inverse:
    diagonal = variance[2] + design.known
    weight = 1.0 / diagonal
    plain = _group_sum(weight, design.head_starts)
    head_scale = 1.0 / (1.0 + variance[1] * plain)
    head_sum = plain * head_scale
    unit_sum = _group_sum(head_sum, design.unit_starts_in_heads)
    unit_scale = 1.0 / (1.0 + variance[0] * unit_sum)
    log_determinant = np.log(diagonal).sum() - np.log(head_scale).sum() - np.log(unit_scale).sum()
    return _Inverse(
        weight,
        variance[1] * head_scale,
        head_sum,
        head_scale,
        variance[0] * unit_scale,
        unit_sum,
        float(log_determinant),
    )


def _apply(design: _Design, inverse: _Inverse, columns: FloatArray) -> FloatArray:
    """Return V^-1 columns."""
    scaled = inverse.weight[:, None] * columns
    by_head = _group_sum(scaled, design.head_starts)
    part = (
        scaled - inverse.weight[:, None] * (inverse.head_shrink[:, None] * by_head)[design.head_of]
    )
    by_unit = _group_sum(part, design.unit_starts)
    back = (inverse.weight * inverse.head_scale[design.head_of])[:, None]
    return part - back * (inverse.unit_shrink[:, None] * by_unit)[design.unit_of]


def _sums(design: _Design, columns: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Sum columns over units, over heads within units and over single observations."""
    by_head = _group_sum(columns, design.head_starts)
    by_unit = _group_sum(by_head, design.unit_starts_in_heads)
    return by_unit, by_head, columns


def _traces(design: _Design, inverse: _Inverse) -> FloatArray:
    """Return trace(V^-1 V_j) for the three components."""
    unit = (inverse.unit_sum * (1.0 - inverse.unit_shrink * inverse.unit_sum)).sum()
    shrink = inverse.unit_shrink[design.unit_of_head]
    head = (inverse.head_sum - shrink * inverse.head_sum**2).sum()
    weight = inverse.weight
    back = weight * inverse.head_scale[design.head_of]
    residual = (
        weight
        - inverse.head_shrink[design.head_of] * weight**2
        - inverse.unit_shrink[design.unit_of] * back**2
    ).sum()
    return np.array([unit, head, residual])


@dataclass(frozen=True)
class _Evaluation:
    deviance: float
    gradient: FloatArray  # (3,) by variance
    effects: FloatArray
    effect_covariance: FloatArray
    projected: FloatArray  # (n,) V^-1 (y - X effects)


def _evaluate(design: _Design, variance: FloatArray) -> _Evaluation:
    """Return minus twice the restricted log likelihood with all that comes with it."""
    inverse = _invert(design, variance)
    solved = _apply(design, inverse, design.data)
    information = design.data.T @ solved
    count = len(information) - 1
    covariance = np.linalg.inv(information[:count, :count])
    effects = covariance @ information[:count, count]
    projected = solved[:, count] - solved[:, :count] @ effects
    log_information = float(np.linalg.slogdet(information[:count, :count])[1])
    quadratic = float(design.data[:, count] @ projected)
    gradient = _traces(design, inverse)
    fixed_sums = _sums(design, solved[:, :count])
    for j, residual in enumerate(_sums(design, projected[:, None])):
        correction = ((fixed_sums[j] @ covariance) * fixed_sums[j]).sum()
        gradient[j] -= correction + (residual**2).sum()
    return _Evaluation(
        inverse.log_determinant + log_information + quadratic,
        gradient,
        np.asarray(effects, dtype=float),
        np.asarray(covariance, dtype=float),
        np.asarray(projected, dtype=float),
    )


def _start(design: _Design, free: tuple[bool, bool, bool]) -> tuple[FloatArray, float]:
    """Return equal shares of the ordinary least-squares variance left by the known part."""
    fixed, value = design.data[:, :-1], design.data[:, -1]
    beta = np.linalg.lstsq(fixed, value, rcond=None)[0]
    freedom = len(value) - fixed.shape[1]
    total = float(((value - fixed @ beta) ** 2).sum() / freedom)
    size = max(float(np.abs(value).max()), float(np.sqrt(design.known.max())))
    scale = max(total, (1e-12 * size) ** 2, np.finfo(float).tiny ** 0.5)
    known = float(np.median(design.known))
    left = max(scale - known, 0.1 * scale)
    return left * np.asarray(free, dtype=float) / sum(free), scale


def _maximise(
    design: _Design, free: tuple[bool, bool, bool], start: FloatArray, scale: float
) -> tuple[FloatArray, float, bool]:
    from scipy.optimize import minimize

    chosen = np.flatnonzero(free)
    floor = np.zeros(3)
    if design.known.min() <= 0.0:
        # Without measurement variance the finest component must stay positive.
        floor[chosen[-1]] = 1e-12

    def expand(parameters: FloatArray) -> FloatArray:
        variance = np.zeros(3)
        variance[chosen] = parameters * scale
        if variance[2] == 0.0 and design.known.min() <= 0.0:
            variance[2] = 1e-12 * scale
        return variance

    def objective(parameters: FloatArray) -> tuple[float, FloatArray]:
        point = _evaluate(design, expand(parameters))
        return 0.5 * point.deviance, 0.5 * scale * point.gradient[chosen]

    found = minimize(
        objective,
        start[chosen] / scale,
        jac=True,
        method="L-BFGS-B",
        bounds=[(floor[j], None) for j in chosen],
        options={"maxiter": _MOST_ITERATIONS, "ftol": 1e-13, "gtol": 1e-7},
    )
    variance = expand(found.x)
    return variance, -float(found.fun), _settled(design, variance, chosen)


def _settled(design: _Design, variance: FloatArray, chosen: IntArray) -> bool:
    """Whether no variance, changed by 1 %, would lower the deviance by more than 1e-4."""
    gradient = _evaluate(design, variance).gradient[chosen]
    at_zero = variance[chosen] <= 1e-9 * variance.sum()
    return bool(np.all(np.where(at_zero, 0.0, np.abs(gradient) * variance[chosen]) < 1e-2))


def _summary(
    design: _Design,
    units: int,
    free: tuple[bool, bool, bool],
    variance: FloatArray,
    likelihood: float,
    converged: bool,
) -> VarianceComponents:
    point = _evaluate(design, variance)
    by_unit = _sums(design, point.projected[:, None])[0][:, 0]
    error = _variance_errors(design, free, variance, point)
    return VarianceComponents(
        point.effects,
        point.effect_covariance,
        np.where(free, variance, np.nan),
        error,
        variance[0] * by_unit if free[0] else np.zeros(units),
        likelihood,
        converged,
    )


def _variance_errors(
    design: _Design,
    free: tuple[bool, bool, bool],
    variance: FloatArray,
    point: _Evaluation,
) -> FloatArray:
    """Invert the average information of the components that are above zero."""
    inverse = _invert(design, variance)
    by_unit, by_head, single = _sums(design, point.projected[:, None])
    working = np.column_stack([by_unit[design.unit_of], by_head[design.head_of], single])
    fixed = design.data[:, :-1]
    solved = _apply(design, inverse, working)
    cross = fixed.T @ solved
    information = 0.5 * (working.T @ solved - cross.T @ point.effect_covariance @ cross)
    error = np.full(3, np.nan)
    inside = np.flatnonzero(np.asarray(free) & (variance > 1e-9 * variance.sum()))
    if inside.size:
        block = np.linalg.pinv(information[np.ix_(inside, inside)])
        error[inside] = np.sqrt(np.maximum(np.diag(block), 0.0))
    return error
