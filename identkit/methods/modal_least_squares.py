"""Maximum-likelihood refinement of a modal model from a start, with its covariance.

Minimises chi^2 = 2 sum |P(j w_i; parameters) - response_i|^2 / variance_i over poles and delay
with the linear parameters projected out (see `modal_problem`), by Levenberg-Marquardt with
analytic derivatives. The covariance is the inverse of the Fisher information of all parameters
at the optimum, the Cramer-Rao bound for circular Gaussian errors of the stated variance.

Source: as `modal_problem`; S. M. Kay, *Fundamentals of Statistical Signal Processing: Estimation
Theory*, 1993, section 15.7 (complex Gaussian data).
"""

from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from identkit.methods.modal_model import TWO_PI, ModalParameters, parameter_names
from identkit.methods.modal_problem import ModalProblem, ModelShape, Poles
from identkit.methods.modal_solution import Solution, internal_covariance, scale_data, solve
from identkit.methods.residual_variance import start_variance, updated_variance
from identkit.outcomes import Outcome


@dataclass(frozen=True)
class ModalFit:
    """One fitted scalar response.

    Attributes
    ----------
    parameters
        Fitted plant; no modes where the outcome is not usable.
    covariance
        (p, p) in natural units; rows of parameters held fixed are zero.
    parameter_names
        p names: delay, feedthrough, base, then per mode.
    noise_ratio
        Reduced chi^2; nan where the variance was estimated.
    variance_estimated
        Whether no variance was given.
    significance
        (modes,) size of the residue over its standard error.
    outcome
        How the fit ended.
    cost
        chi^2 of the stated or estimated variance.
    points
        Number of points used.
    start_mode
        (modes,) which mode of the start each came from.
    """

    parameters: ModalParameters
    covariance: FloatArray
    parameter_names: tuple[str, ...]
    noise_ratio: float
    variance_estimated: bool
    significance: FloatArray
    outcome: Outcome
    cost: float
    points: int
    start_mode: IntArray


def usable_points(
    frequency: FloatArray, response: ComplexArray, variance: FloatArray | None, base: str
) -> BoolArray:
    """Return which points can be fitted: finite, with a finite variance, above 0 Hz if needed."""
    usable = np.isfinite(response) & np.isfinite(frequency)
    if variance is not None:
        usable &= np.isfinite(variance) & (variance >= 0.0)
    return usable & (frequency > 0.0) if base == "free" else usable


def starting_poles(parameters: ModalParameters, reference: float) -> Poles:
    """Return the search point of a plant."""
    frequency, damping = parameters.modal_frequency, parameters.damping_ratio
    if parameters.base == "pivot":
        frequency = np.concatenate([[parameters.base_frequency], frequency])
        damping = np.concatenate([[parameters.base_damping_ratio], damping])
    return Poles(
        parameters.delay * reference,
        np.log(TWO_PI * np.asarray(frequency, dtype=float) / reference),
        np.log(np.maximum(damping, 1e-6)),
    )


def refine_modal_model(
    frequency: FloatArray,
    response: ComplexArray,
    variance: FloatArray | None,
    start: ModalParameters,
    *,
    delay: bool = True,
    general: bool | None = None,
    feedthrough: bool = True,
) -> ModalFit:
    """Refine a modal model by maximum likelihood from given starting parameters.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    response
        (points,) output/input; points that are not finite are left out.
    variance
        (points,) E|error|^2 of both parts together, or None: then it is estimated from the
        residuals (see `residual_variance`), at the price of a second pass.
    start
        Base, number of modes and starting poles and delay; residues need no start.
    delay
        Whether the delay is fitted; if not it stays at its start.
    general
        Whether residue rates are fitted; None: where the start has one.
    feedthrough
        Whether the feedthrough is fitted; if not it is zero.

    Returns
    -------
    ModalFit
        Modes ascending in frequency. Outcomes: DONE, NOT_CONVERGED, SINGULAR_COVARIANCE,
        TOO_FEW_POINTS, NOT_FINITE, NO_MODES (when the start has none).

    Notes
    -----
    Local: finds the optimum in whose basin the start lies; a start within about one half-power
    bandwidth per mode is near enough in practice.
    """
    use = usable_points(frequency, response, variance, start.base)
    rates = bool(np.any(start.residue_rate)) if general is None else general
    shape = ModelShape(start.base, start.modal_frequency.size, rates, feedthrough, delay)
    refused = refusal(use, response, shape)
    if refused is not None:
        return empty_fit(shape, refused, int(use.sum()), variance is None)
    frequency, response = frequency[use], response[use]
    spread = start_variance(frequency, response) if variance is None else variance[use]
    poles = starting_poles(start, float(TWO_PI * frequency[-1]))
    for _ in range(2):
        data = scale_data(frequency, response, spread)
        solution = solve(ModalProblem(data, shape, poles.delay), poles)
        spread = updated_variance(solution, response, spread, variance is None)
        poles = solution.poles
    data = scale_data(frequency, response, spread)
    return as_fit(solve(ModalProblem(data, shape, poles.delay), poles), variance is None)


def refusal(use: BoolArray, response: ComplexArray, shape: ModelShape) -> Outcome | None:
    """Return why a response cannot be fitted, or None."""
    if not np.isfinite(response).any():
        return Outcome.NOT_FINITE
    needed = replace(shape, modes=max(shape.modes, 1)).parameters
    if 2 * int(use.sum()) < needed + 4 or not np.any(response[use]):
        return Outcome.TOO_FEW_POINTS
    return None


def empty_fit(shape: ModelShape, outcome: Outcome, points: int, estimated: bool) -> ModalFit:
    """Return the fit of a response that could not be fitted."""
    nothing = np.zeros(0)
    value = float("nan")
    parameters = ModalParameters(
        nothing, nothing, nothing, nothing, shape.base,
        base_gain=value, base_frequency=value, base_damping_ratio=value, base_residue=value,
        feedthrough=value, delay=value,
    )  # fmt: skip
    names = parameter_names(shape.base, 0, general=shape.general)
    covariance = np.full((len(names), len(names)), np.nan)
    return ModalFit(
        parameters, covariance, names, value, estimated, nothing, outcome, value, points,
        np.zeros(0, dtype=np.int64),
    )  # fmt: skip


def as_fit(
    solution: Solution, variance_estimated: bool, outcome: Outcome = Outcome.DONE
) -> ModalFit:
    """Return a solution in natural units, modes ascending, with covariance and outcome."""
    shape = solution.shape
    order = np.argsort(solution.poles.log_frequency[shape.sections - shape.modes :])
    internal, singular = internal_covariance(solution)
    values, jacobian = _natural(solution, order)
    covariance = jacobian @ internal @ jacobian.T
    names = parameter_names(shape.base, shape.modes, general=shape.general)
    points = solution.problem.data.x.size
    freedom = 2 * points - shape.parameters
    ratio = float("nan") if variance_estimated else solution.cost / freedom
    return ModalFit(
        _parameters(shape, values),
        covariance,
        names,
        ratio,
        variance_estimated,
        np.sqrt(_wald(values, covariance, shape)),
        _final_outcome(solution, singular, outcome),
        solution.cost,
        points,
        np.asarray(order, dtype=np.int64),
    )


def _final_outcome(solution: Solution, singular: bool, outcome: Outcome) -> Outcome:
    if not solution.converged:
        return Outcome.NOT_CONVERGED
    if singular:
        return Outcome.SINGULAR_COVARIANCE
    return Outcome.NO_MODES if solution.shape.modes == 0 else outcome


def _natural(solution: Solution, order: IntArray) -> tuple[FloatArray, FloatArray]:
    """Return values in natural units and order, and their derivative by internal coordinates."""
    shape, poles = solution.shape, solution.poles
    reference = solution.problem.data.reference
    linear, first = solution.state.coefficients, len(solution.state.coefficients)
    fixed = int(shape.feedthrough) + (shape.base == "free")
    pivot = shape.sections - shape.modes
    values: list[float] = []
    entries: list[tuple[int, float]] = []

    def put(value: float, column: int, slope: float) -> None:
        values.append(value)
        entries.append((column, slope))

    def put_section(k: int) -> None:
        column = first + int(shape.delay) + 2 * k
        frequency = float(np.exp(poles.log_frequency[k])) * reference / TWO_PI
        damping = float(np.exp(poles.log_damping[k]))
        put(frequency, column, frequency)
        put(damping, column + 1, damping)
        put(float(linear[fixed + k]) * reference**2, fixed + k, reference**2)

    put(poles.delay / reference, first if shape.delay else -1, 1.0 / reference)
    put(float(linear[0]) if shape.feedthrough else 0.0, 0 if shape.feedthrough else -1, 1.0)
    if shape.base == "free":
        put(float(linear[fixed - 1]) * reference**2, fixed - 1, reference**2)
    if shape.base == "pivot":
        put_section(0)
    for k in order:
        put_section(pivot + int(k))
        if shape.general:
            column = fixed + shape.sections + int(k)
            put(float(linear[column]) * reference, column, reference)
    jacobian = np.zeros((len(values), first + int(shape.delay) + 2 * shape.sections))
    for row, (column, slope) in enumerate(entries):
        if column >= 0:
            jacobian[row, column] = slope
    return np.array(values), jacobian


def _parameters(shape: ModelShape, values: FloatArray) -> ModalParameters:
    start = {"free": 3, "pivot": 5, "none": 2}[shape.base]
    table = values[start:].reshape(shape.modes, 4 if shape.general else 3)
    pivot = values[2:5] if shape.base == "pivot" else np.zeros(3)
    return ModalParameters(
        table[:, 0].copy(),
        table[:, 1].copy(),
        table[:, 2].copy(),
        table[:, 3].copy() if shape.general else np.zeros(shape.modes),
        shape.base,
        base_gain=float(values[2]) if shape.base == "free" else 0.0,
        base_frequency=float(pivot[0]),
        base_damping_ratio=float(pivot[1]),
        base_residue=float(pivot[2]),
        feedthrough=float(values[1]),
        delay=float(values[0]),
    )


def _wald(values: FloatArray, covariance: FloatArray, shape: ModelShape) -> FloatArray:
    """Return per mode the Wald statistic of its residue, or of residue and rate together."""
    start = {"free": 3, "pivot": 5, "none": 2}[shape.base]
    stride = 4 if shape.general else 3
    out = np.zeros(shape.modes)
    for k in range(shape.modes):
        part = slice(start + stride * k + 2, start + stride * (k + 1))
        scale = np.sqrt(np.diag(covariance[part, part]))
        vector = values[part] / scale
        correlation = covariance[part, part] / scale[:, None] / scale
        out[k] = vector @ np.linalg.lstsq(correlation, vector, rcond=1e-12)[0]
    return np.maximum(out, 0.0)
