"""Minima of the projected modal problem: search, fitted response, information matrix.

Source: as `modal_problem`; the covariance is the inverse of the Fisher information (S. M. Kay,
*Fundamentals of Statistical Signal Processing: Estimation Theory*, 1993, section 15.7).
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.levenberg_marquardt import minimise
from identkit.methods.modal_model import TWO_PI
from identkit.methods.modal_problem import (
    Linearised,
    ModalProblem,
    ModelShape,
    Poles,
    ScaledData,
    scaled_factor,
)

TOLERANCE = 1e-9
LAST_STEP = 1e-6
ROUNDING = 1e-26  # of the data's own sum of squares: steps below are rounding
SINGULAR_PIVOT = 1e-5
VARIANCE_FLOOR = 1e-18


@dataclass(frozen=True)
class Solution:
    """A minimum of the dimensionless problem."""

    problem: ModalProblem
    state: Linearised
    cost: float
    converged: bool

    @property
    def shape(self) -> ModelShape:
        """The terms of the model."""
        return self.problem.shape

    @property
    def poles(self) -> Poles:
        """Delay and sections."""
        return self.state.poles


def scale_data(frequency: FloatArray, response: ComplexArray, variance: FloatArray) -> ScaledData:
    """Return the dimensionless weighted problem data; all points must be usable.

    Variances below 1e-18 of the squared response are raised to that, so that data without noise
    do not divide by zero.
    """
    power = np.abs(response) ** 2
    floor = VARIANCE_FLOOR * np.maximum(power, 1e-12 * np.max(power, initial=1e-300))
    weight = np.sqrt(2.0 / np.maximum(variance, floor))
    omega = TWO_PI * frequency
    reference = float(omega[-1])
    return ScaledData(omega / reference, weight, weight * response, reference)


def solve(problem: ModalProblem, start: Poles, *, tolerance: float = TOLERANCE) -> Solution:
    """Minimise the problem from some poles."""
    found = minimise(
        problem.evaluate,
        problem.normal_equations,
        problem.pack(start),
        tolerance=tolerance,
        absolute=ROUNDING * float(np.sum(np.abs(problem.data.target) ** 2)),
        last_step=LAST_STEP,
        step_limit=problem.step_limit(),
    )
    return Solution(problem, found.state, found.cost, found.converged)


def information_factor(solution: Solution) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return all rows (linear, then search coordinates), factor and scale of their Gram matrix."""
    rows = np.concatenate([solution.state.columns, solution.problem.derivatives(solution.state)])
    return rows, *scaled_factor(rows @ rows.T)


def internal_covariance(solution: Solution) -> tuple[FloatArray, bool]:
    """Return the covariance of linear then search coordinates, and whether it is singular."""
    _, factor, scale = information_factor(solution)
    inverse, failed = lapack.dpotri(factor, lower=1)
    inverse = np.tril(inverse) + np.tril(inverse, -1).T
    singular = failed != 0 or float(np.min(np.diag(factor), initial=1.0)) < SINGULAR_PIVOT
    return inverse * scale[:, None] * scale, singular


def fitted_response(solution: Solution) -> ComplexArray:
    """Return the fitted response (points,), output/input."""
    data, points = solution.problem.data, solution.problem.data.x.size
    model = solution.state.model
    turned = (model[:points] + 1j * model[points:]) / data.weight
    return np.asarray(turned * np.exp(-1j * solution.poles.delay * data.x), dtype=complex)
