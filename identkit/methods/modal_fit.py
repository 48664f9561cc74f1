"""Automatic modal fit of one scalar response: starting poles, delay, order, refinement.

1. Over-ordered relaxed pole relocation (`pole_relocation`), delay scan (`delay_scan`), relocation
   again on the turned data, delay scan again.
2. Forward selection of poles (`order_selection`), maximum-likelihood refinement
   (`modal_least_squares`).
3. Add by score test, drop by Wald test, each refitted and settled by the information criterion;
   the variance is updated from the model once (`residual_variance`) and the order settled again.

Where residuals stay above the stated variance (the data do not follow the model), every gain is
measured in units of the residual variance of the over-ordered fit, and the number of modes is
capped; reaching the cap is an outcome of its own.
"""

from dataclasses import replace
from typing import TypeAlias

import numpy as np
from scipy.stats import chi2

from identkit.errors import InputError, Problem
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.delay_minima import best_delay
from identkit.methods.long_delay import long_delay
from identkit.methods.modal_least_squares import (
    ModalFit,
    as_fit,
    empty_fit,
    refusal,
    usable_points,
)
from identkit.methods.modal_model import BASES
from identkit.methods.modal_problem import ModalProblem
from identkit.methods.modal_solution import Solution, scale_data, solve
from identkit.methods.order_settling import Request, mode_cap, settle
from identkit.methods.residual_variance import start_variance, updated_variance
from identkit.methods.starting_poles import starting_point
from identkit.outcomes import Outcome

LIKELIHOOD_RATIO_LEVEL = 1e-3
VARIANCE_PASSES, VARIANCE_SETTLED = 6, 0.05
POOR = 2.0
"""Noise ratio above which a fit may sit in the wrong minimum over the delay."""
LEFT = 0.1
"""Share of the response left unexplained above which trial delays are worth whole fits."""
HELD_DELAYS = (0.0, 6.0, 12.0, 18.0, 24.0, 30.0)
RESIDUES = ("real", "general", "auto")

Measured: TypeAlias = tuple[FloatArray, ComplexArray, FloatArray]


def fit_modal_model(
    frequency: FloatArray,
    response: ComplexArray,
    variance: FloatArray | None = None,
    *,
    base: str = "pivot",
    modes: str | int = "auto",
    delay: bool = True,
    residues: str = "real",
    feedthrough: bool = True,
) -> ModalFit:
    """Fit a modal model to one response, number of modes included, by maximum likelihood.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    response
        (points,) output/input; points that are not finite are left out.
    variance
        (points,) E|error|^2 of both parts together, or None to estimate it from the residuals.
    base
        "free", "pivot" or "none".
    modes
        "auto" or the number of modes.
    delay, feedthrough
        Whether they are fitted; if not they are zero.
    residues
        "real", "general" (with residue rates) or "auto": general where a likelihood-ratio test at
        the 0.1 % level asks for it.

    Returns
    -------
    ModalFit
        Outcomes: DONE, NO_MODES, MODE_LIMIT, NOT_CONVERGED, SINGULAR_COVARIANCE, TOO_FEW_POINTS,
        NOT_FINITE.

    Raises
    ------
    InputError
        If an option is not one of those above or the arrays do not match.

    Notes
    -----
    Continuous-time data only. Does not apply to time-varying or clearly nonlinear responses: the
    noise ratio then stands far above 1.
    """
    _check(frequency, response, variance, base, modes, residues)
    number = None if modes == "auto" else int(modes)
    request = Request(base, number, delay, residues == "general", feedthrough)
    frequency, response = np.asarray(frequency, float), np.asarray(response, complex)
    use = usable_points(frequency, response, variance, base)
    refused = refusal(use, response, request.shape(number or 0))
    if refused is not None:
        return empty_fit(request.shape(0), refused, int(use.sum()), variance is None)
    frequency, response = frequency[use], response[use]
    turn = long_delay(frequency, response) if delay else 0.0
    response = response * np.exp(2j * np.pi * frequency * turn)
    spread = start_variance(frequency, response) if variance is None else variance[use]
    data = (frequency, response, spread)
    either = residues == "auto"
    solution = _causal(_fitted(data, request, variance is None, either), request, turn)
    capped = number is None and solution.shape.modes >= mode_cap(frequency.size)
    fit = as_fit(solution, variance is None, Outcome.MODE_LIMIT if capped else Outcome.DONE)
    return _delayed(fit, turn)


def _fitted(measured: Measured, request: Request, estimated: bool, either: bool) -> Solution:
    """Fit; where residuals stay above the variance, look at the other minima over the delay."""
    solution = (_fit_either if either else _fit)(measured, request, estimated)
    if not request.delay or not (estimated or _noise(solution) > POOR):
        return solution
    best = best_delay(solution)
    if _left(best) > LEFT:
        best = min([best, *_from_held_delays(best, request)], key=lambda one: one.cost)
    if best is solution:
        return solution
    return settle(best, replace(request, general=best.shape.general), 1.0)


def _from_held_delays(poor: Solution, request: Request) -> list[Solution]:
    """Fit with the delay held at trial values, then set it free: poles cannot absorb a turn."""
    data, found = poor.problem.data, []
    held = replace(request, delay=False, general=poor.shape.general)
    for delay in HELD_DELAYS:
        turned = replace(data, target=data.target * np.exp(1j * delay * data.x))
        start, modes, _ = starting_point(turned, held)
        fixed = solve(ModalProblem(turned, held.shape(modes)), start)
        fixed = settle(fixed, held, _noise(poor))
        free = ModalProblem(data, replace(fixed.shape, delay=True))
        found.append(solve(free, replace(fixed.poles, delay=delay)))
    return found


def _left(solution: Solution) -> float:
    """Return the share of the weighted response that the model does not explain."""
    return solution.cost / float(np.sum(np.abs(solution.problem.data.target) ** 2))


def _noise(solution: Solution) -> float:
    freedom = 2 * solution.problem.data.x.size - solution.shape.parameters
    return solution.cost / max(freedom, 1)


def _causal(solution: Solution, request: Request, turn: float) -> Solution:
    """Hold a delay that came out negative at zero: a plant does not answer before it is asked."""
    data = solution.problem.data
    if not request.delay or turn > 0.0 or solution.poles.delay >= 0.0:
        return solution
    shape = replace(solution.shape, delay=False)
    held = solve(ModalProblem(data, shape), replace(solution.poles, delay=0.0))
    return settle(held, replace(request, delay=False, general=shape.general), 1.0)


def _delayed(fit: ModalFit, turn: float) -> ModalFit:
    parameters = replace(fit.parameters, delay=fit.parameters.delay + turn)
    return replace(fit, parameters=parameters)


def _check(
    frequency: FloatArray,
    response: ComplexArray,
    variance: FloatArray | None,
    base: str,
    modes: str | int,
    residues: str,
) -> None:
    problems = []
    if base not in BASES:
        problems.append(Problem("base", repr(base), f"one of {', '.join(BASES)}"))
    if residues not in RESIDUES:
        problems.append(Problem("residues", repr(residues), f"one of {', '.join(RESIDUES)}"))
    if modes != "auto" and (isinstance(modes, str) or modes < 0):
        problems.append(Problem("modes", repr(modes), '"auto" or a number from 0 up'))
    for name, values in (("response", response), ("variance", variance)):
        if values is not None and np.shape(values) != np.shape(frequency):
            found, expected = np.shape(values), np.shape(frequency)
            problems.append(Problem(name, f"shape {found}", f"shape {expected} like frequency"))
    if np.any(np.diff(frequency) <= 0.0):
        problems.append(Problem("frequency", "values that do not increase", "increasing Hz"))
    if problems:
        raise InputError(problems)


def _fit(measured: Measured, request: Request, estimated: bool) -> Solution:
    """Start, refine and settle; update the variance; settle again."""
    frequency, response, variance = measured
    data = scale_data(frequency, response, variance)
    start, modes, scale = starting_point(data, request)
    solution = solve(ModalProblem(data, request.shape(modes)), start)
    return _settled(solution, measured, request, estimated, scale)


def _settled(
    solution: Solution, measured: Measured, request: Request, estimated: bool, scale: float
) -> Solution:
    frequency, response, variance = measured
    solution = settle(solution, request, scale)
    for _ in range(VARIANCE_PASSES if estimated else 1):
        before = variance
        variance = updated_variance(solution, response, variance, estimated)
        data = scale_data(frequency, response, variance)
        again = solve(ModalProblem(data, solution.shape), solution.poles)
        solution = settle(again, request, 1.0 if estimated else scale)
        if np.max(np.abs(np.log(variance / before))) < VARIANCE_SETTLED:
            break
    return solution


def _fit_either(measured: Measured, request: Request, estimated: bool) -> Solution:
    """Choose real or general residues by likelihood ratio, before and after settling the order."""
    data = scale_data(*measured)
    start, modes, scale = starting_point(data, request)
    first = solve(ModalProblem(data, request.shape(modes)), start)
    general = replace(request, general=True)
    if _needs_rates(first):
        found = _fit(measured, general, estimated)
    else:
        found = _settled(first, measured, request, estimated, scale)
        if not _needs_rates(found):
            return found
        found = settle(with_rates(found), general, scale)
    real = solve(ModalProblem(found.problem.data, replace(found.shape, general=False)), found.poles)
    return found if _needs_rates(real) else settle(real, request, scale)


def with_rates(solution: Solution) -> Solution:
    """Refit with residue rates at the same modes."""
    problem = ModalProblem(solution.problem.data, replace(solution.shape, general=True))
    return solve(problem, solution.poles)


def _needs_rates(real: Solution) -> bool:
    """Likelihood-ratio test of real against general residues at the same modes."""
    modes = real.shape.modes
    if modes == 0:
        return False
    general = with_rates(real)
    freedom = 2 * real.problem.data.x.size - general.shape.parameters
    noise = max(1.0, general.cost / max(freedom, 1))
    return bool(real.cost - general.cost > chi2.isf(LIKELIHOOD_RATIO_LEVEL, modes) * noise)
