"""Levenberg-Marquardt for sums of squares, with the damping rule of Nielsen.

Minimises F(x) = sum e_i(x)^2 by steps (H + mu diag H) step = g with H = J^T J and g = -J^T e.

Sources: D. W. Marquardt, "An algorithm for least-squares estimation of nonlinear parameters",
J. SIAM 11 (1963) 431-441; H. B. Nielsen, "Damping parameter in Marquardt's method", report
IMM-REP-1999-05, Technical University of Denmark, 1999 (update of the damping).
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Generic, TypeVar

import numpy as np
from scipy.linalg import lapack, solve_triangular

from identkit.methods.arrays import FloatArray

State = TypeVar("State")

DAMPING_START = 1e-3
DAMPING_LIMIT = 1e14
SLIGHT_DAMPING = 1e-2
POLISHING_STEPS = 30


@dataclass
class Minimum(Generic[State]):
    """Where the search ended: point, sum of squares, last state, whether it settled."""

    point: FloatArray
    cost: float
    state: State
    converged: bool
    iterations: int


@dataclass(frozen=True)
class LeastSquaresFit:
    """Nonlinear least squares with its parameter covariance.

    Attributes
    ----------
    point
        (p,) parameters.
    covariance
        (p, p) residual variance times (J^T J)^-1, by orthogonal factorisation of J.
    cost
        Residual sum of squares.
    converged
        Whether the predicted gain fell below the tolerance.
    iterations
        Steps tried.
    """

    point: FloatArray
    covariance: FloatArray
    cost: float
    converged: bool
    iterations: int


def minimise(
    evaluate: Callable[[FloatArray], tuple[float, State]],
    normal_equations: Callable[[State], tuple[FloatArray, FloatArray]],
    start: FloatArray,
    *,
    tolerance: float = 1e-10,
    absolute: float = 0.0,
    last_step: float = 0.0,
    step_limit: FloatArray | None = None,
    max_iterations: int = 60,
) -> Minimum[State]:
    """Minimise a sum of squares given by its value and its normal equations.

    Parameters
    ----------
    evaluate
        x -> (cost, state); a cost that is not finite marks a forbidden point.
    normal_equations
        state -> (H, g), H = J^T J (p, p) and g = -J^T e (p,), of the state's point.
    start
        (p,) starting point.
    tolerance
        Stop when the predicted decrease is below this share of the cost.
    absolute
        Stop when it is below this, whatever the cost.
    last_step
        Stop after a step that was predicted to bring less than 100 times this share of the cost
        and missed the prediction by less than this share: what is left is of the size of the miss.
    step_limit
        (p,) largest step per coordinate, or None.
    max_iterations
        Number of steps tried at most, rejected ones included.
    """
    point = np.array(start, dtype=float)
    cost, state = evaluate(point)
    damping, growth, tried = DAMPING_START, 2.0, 0
    if point.size == 0 or not np.isfinite(cost):
        return Minimum(point, cost, state, point.size == 0, 0)
    hessian, gradient = normal_equations(state)
    while tried < max_iterations:
        tried += 1
        step = _limited(damped_step(hessian, gradient, damping), step_limit)
        predicted = float(step @ (2.0 * gradient - hessian @ step))
        if not predicted > tolerance * cost + absolute:
            limit = max(100.0 * (tolerance * cost + absolute), 1e-10 * cost)
            settled = _settled(hessian, gradient, damping, limit)
            return Minimum(point, cost, state, settled, tried)
        trial_cost, trial_state = evaluate(point + step)
        ratio = (cost - trial_cost) / predicted if np.isfinite(trial_cost) else -1.0
        if ratio > 1e-4:
            point, cost, state = point + step, trial_cost, trial_state
            surprise = abs(1.0 - ratio) * predicted
            if predicted <= 100.0 * last_step * cost and surprise <= last_step * cost:
                return Minimum(point, cost, state, True, tried)
            hessian, gradient = normal_equations(state)
            damping *= max(0.1, 1.0 - (2.0 * ratio - 1.0) ** 3)
            growth = 2.0
        else:
            damping, growth = max(damping, 1e-9) * growth, growth * 2.0
            if damping > DAMPING_LIMIT:
                return Minimum(point, cost, state, False, tried)
    return Minimum(point, cost, state, False, tried)


def _settled(hessian: FloatArray, gradient: FloatArray, damping: float, limit: float) -> bool:
    """Whether the step is small in itself, not only because it was damped."""
    if damping <= SLIGHT_DAMPING:
        return True
    return float(gradient @ damped_step(hessian, gradient, 0.0)) <= limit


def damped_step(hessian: FloatArray, gradient: FloatArray, damping: float) -> FloatArray:
    """Solve (H + damping diag H) step = g after scaling H to a unit diagonal."""
    diagonal = np.diag(hessian)
    scale = 1.0 / np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0))
    scaled = hessian * scale[:, None] * scale
    matrix = scaled.copy()
    while True:
        matrix.flat[:: len(scale) + 1] = np.where(diagonal > 0.0, 1.0 + damping, 1.0)
        factor, failed = lapack.dpotrf(matrix, lower=1)
        if failed == 0:
            solution, _ = lapack.dpotrs(factor, gradient * scale, lower=1)
            return np.asarray(solution * scale, dtype=float)
        damping = max(10.0 * damping, 1e-12)


def _limited(step: FloatArray, limit: FloatArray | None) -> FloatArray:
    if limit is None:
        return step
    excess = float(np.max(np.abs(step) / limit))
    return step / excess if excess > 1.0 else step


def least_squares(
    residual: Callable[[FloatArray], FloatArray],
    jacobian: Callable[[FloatArray], FloatArray],
    start: FloatArray,
    *,
    tolerance: float = 1e-15,
    max_iterations: int = 2000,
) -> LeastSquaresFit:
    """Fit by least squares with the same core, for any residual and Jacobian.

    Parameters
    ----------
    residual
        x -> (n,) residuals, data minus model.
    jacobian
        x -> (n, p) derivatives of the residuals.
    start
        (p,) starting point.
    tolerance, max_iterations
        As in `minimise`.

    Notes
    -----
    Local: the answer is the minimum in whose basin the start lies.
    """

    def evaluate(point: FloatArray) -> tuple[float, tuple[FloatArray, FloatArray]]:
        with np.errstate(all="ignore"):
            error = residual(point)
            return float(error @ error), (point, error)

    def normal_equations(state: tuple[FloatArray, FloatArray]) -> tuple[FloatArray, FloatArray]:
        slope = jacobian(state[0])
        return slope.T @ slope, -(slope.T @ state[1])

    found = minimise(
        evaluate, normal_equations, start, tolerance=tolerance, max_iterations=max_iterations
    )
    point = _polished(residual, jacobian, found.point) if found.converged else found.point
    error = residual(point)
    cost = float(error @ error)
    covariance = _covariance(jacobian(point), cost)
    return LeastSquaresFit(point, covariance, cost, found.converged, found.iterations)


def _polished(
    residual: Callable[[FloatArray], FloatArray],
    jacobian: Callable[[FloatArray], FloatArray],
    point: FloatArray,
) -> FloatArray:
    """Undamped steps by orthogonal factorisation, while they shrink.

    Near the minimum the sum of squares no longer tells points apart to rounding; the step does.
    """
    size = np.inf
    for _ in range(POLISHING_STEPS):
        slope = jacobian(point)
        scale = np.linalg.norm(slope, axis=0)
        scaled = np.linalg.lstsq(slope / scale, -residual(point), rcond=None)[0]
        if not np.linalg.norm(scaled) < size:
            break
        size = float(np.linalg.norm(scaled))
        point = point + scaled / scale
    return point


def _covariance(slope: FloatArray, cost: float) -> FloatArray:
    points, parameters = slope.shape
    scale = np.linalg.norm(slope, axis=0)
    upper = np.linalg.qr(slope / scale, mode="r")
    inverse = solve_triangular(upper, np.eye(parameters)) / scale[:, None]
    return np.asarray(inverse @ inverse.T * cost / (points - parameters), dtype=float)
