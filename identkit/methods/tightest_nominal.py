"""Modal nominal of least relative radius: least p-th approximation.

The radius rho(f) = max_i |P_i/P0 - 1| is smoothed to a p-norm over the plants, p rising in steps
(J. W. Bandler, C. Charalambous, "Practical least pth optimization of networks", IEEE Trans.
Microwave Theory and Techniques 20(12), 1972, 834-840). Minimised is the mean over log frequency of
y + max(y, 0)^2 with y = log max(rho, least): the mean keeps the radius small where it can be small,
the square keeps peaks above 1 down; a min-max of rho over its floor would spend all freedom on one
frequency. The search is local (R. H. Byrd, P. Lu, J. Nocedal, C. Zhu, "A limited memory algorithm
for bound constrained optimization", SIAM J. Scientific Computing 16(5), 1995, 1190-1208) and starts
from a given nominal, so the result is never worse than that by the same measure.
"""

from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.hull_vertices import hull_vertices
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.pade_delay import pade_response

POWERS = (8.0, 24.0, 72.0)
MOST_STEPS = 150
LARGEST_SHIFT = 0.05
LARGEST_DAMPING_CHANGE = 1.2


@dataclass(frozen=True)
class Refinement:
    """Outcome of a search.

    Attributes
    ----------
    parameters
        The nominal found.
    start_cost, cost
        The measure, exact maximum over all plants, before and after.
    """

    parameters: ModalParameters
    start_cost: float
    cost: float


def tightest_nominal(
    frequency: FloatArray,
    values: ComplexArray,
    start: ModalParameters,
    delay_order: int,
    residue_scale: FloatArray,
    least: float,
) -> Refinement:
    """Improve a nominal's modes, residues and feedthrough for the least relative radius.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    values
        (plants, points) responses.
    start
        Nominal to begin with; its delay and its base's poles are kept.
    delay_order
        Order of the all-pass that stands for the delay.
    residue_scale
        (modes,) typical size of each residue in the plants.
    least
        Radius below which nothing is gained.

    Returns
    -------
    Refinement
        Residue rates may be non-zero: they move the nominal's zeros off the axis.
    """
    problem = _Problem(frequency, values, start, delay_order, residue_scale, least)
    best = np.zeros(problem.size)
    start_cost = cost = problem.exact_cost(best)
    for power in POWERS:
        found = problem.minimised(best, power)
        reached = problem.exact_cost(found)
        if reached < cost:
            best, cost = found, reached
    return Refinement(problem.parameters(best), start_cost, cost)


class _Problem:
    """Scaled unknowns: log shifts of frequency and damping, residues, rates, base, feedthrough."""

    def __init__(
        self,
        frequency: FloatArray,
        values: ComplexArray,
        start: ModalParameters,
        delay_order: int,
        residue_scale: FloatArray,
        least: float,
    ) -> None:
        self.start, self.least = start, least
        self.values, self.present = hull_vertices(values)
        self.modes = start.modal_frequency.size
        self.size = 4 * self.modes + 2
        self.residue_scale = residue_scale
        self.rate_scale = residue_scale / (TWO_PI * start.modal_frequency)
        # A constant that matters: the median size of the plants at the upper end.
        self.constant_scale = float(np.median(np.abs(values[:, -1])))
        self.s = 2j * np.pi * frequency
        self.frequency = frequency
        self.allpass = pade_response(TWO_PI * frequency * start.delay, delay_order)
        log_frequency = np.log(frequency)
        weight = np.gradient(log_frequency)
        self.weight = weight / weight.sum()
        self.base = self._base_response()

    def _base_response(self) -> ComplexArray:
        none = np.zeros(0)
        alone = replace(
            self.start, modal_frequency=none, damping_ratio=none, residue=none, residue_rate=none,
            feedthrough=0.0, delay=0.0,
        )  # fmt: skip
        return modal_response(self.frequency, alone)

    def parameters(self, x: FloatArray) -> ModalParameters:
        """Return the nominal at scaled unknowns `x`."""
        shift, damping, residue, rate = x[: 4 * self.modes].reshape(4, self.modes)
        gain = 1.0 + x[-2]
        return replace(
            self.start,
            modal_frequency=self.start.modal_frequency * np.exp(shift),
            damping_ratio=self.start.damping_ratio * np.exp(damping),
            residue=self.start.residue + residue * self.residue_scale,
            residue_rate=self.start.residue_rate + rate * self.rate_scale,
            base_gain=self.start.base_gain * gain,
            base_residue=self.start.base_residue * gain,
            feedthrough=self.start.feedthrough + x[-1] * self.constant_scale,
        )

    def response(self, x: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        """Return P0 (points,) and its derivatives (unknowns, points)."""
        plant = self.parameters(x)
        natural = TWO_PI * plant.modal_frequency[:, None]
        damped = 2.0 * plant.damping_ratio[:, None] * natural * self.s
        unit = 1.0 / (natural**2 + damped + self.s**2)
        above = plant.residue[:, None] + self.s * plant.residue_rate[:, None]
        terms = above * unit
        slope = -terms * unit
        value = terms.sum(axis=0) + plant.feedthrough + (1.0 + x[-2]) * self.base
        derivative = np.concatenate(
            [
                slope * (2.0 * natural**2 + damped),
                slope * damped,
                unit * self.residue_scale[:, None],
                unit * (self.s * self.rate_scale[:, None]),
                self.base[None],
                np.full((1, self.s.size), self.constant_scale, dtype=complex),
            ]
        )
        return value * self.allpass, derivative * self.allpass

    def exact_cost(self, x: FloatArray) -> float:
        """Return the measure with the true maximum over all plants."""
        radius = np.abs(self.values / self.response(x)[0] - 1.0).max(axis=0)
        level = np.log(np.maximum(radius, self.least))
        return float(self.weight @ (level + np.maximum(level, 0.0) ** 2))

    def minimised(self, x: FloatArray, power: float) -> FloatArray:
        """Search from `x` with one power."""
        from scipy.optimize import minimize

        found = minimize(
            self.smooth_cost, x, args=(power,), jac=True, method="L-BFGS-B",
            bounds=self._bounds(), options={"maxiter": MOST_STEPS, "maxcor": 30},
        )  # fmt: skip
        return np.asarray(found.x, dtype=float)

    def smooth_cost(self, x: FloatArray, power: float) -> tuple[float, FloatArray]:
        """Return the measure with a p-norm over the hull's vertices, and its gradient."""
        value, derivative = self.response(x)
        error = self.values / value - 1.0
        size = np.abs(error) + 1e-300
        top = size.max(axis=0)
        share = np.where(self.present, (size / top) ** power, 0.0)
        total = share.sum(axis=0)
        radius = np.hypot(top * total ** (1.0 / power), self.least)
        level = np.log(radius)
        cost = self.weight @ (level + np.maximum(level, 0.0) ** 2)
        # d log radius = Re(pull dP0): chain of hypot, p-norm and the ratio.
        chain = (top * total ** (1.0 / power) / radius) ** 2
        pull = -(share / total * error.conj() / size**2 * self.values).sum(axis=0) / value**2
        outer = self.weight * (1.0 + 2.0 * np.maximum(level, 0.0)) * chain
        return float(cost), np.asarray((derivative @ (outer * pull)).real, dtype=float)

    def _bounds(self) -> list[tuple[float | None, float | None]]:
        shift = [(-LARGEST_SHIFT, LARGEST_SHIFT)] * self.modes
        damping = [(-LARGEST_DAMPING_CHANGE, LARGEST_DAMPING_CHANGE)] * self.modes
        free: list[tuple[float | None, float | None]] = [(None, None)] * (2 * self.modes + 2)
        return [*shift, *damping, *free]
