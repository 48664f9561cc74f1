"""A radius curve with profile, cap and outside points, as bounds on a ratio of polynomials."""

from dataclasses import dataclass, replace

import numpy as np

from identkit.errors import InfeasibleError, InputError, Problem
from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray
from identkit.methods.damping_rows import warped
from identkit.methods.differential_correction import RatioBounds
from identkit.methods.spectral_factor import factor_magnitude

TWO_PI = 2.0 * np.pi
OUTSIDE_DECADES = 2.0
WIDEST_GAP = 1.1
NO_CEILING_FACTOR = 1e3
HEADROOM = 1e-11


@dataclass(frozen=True)
class RadiusProblem:
    """What a weight has to keep.

    Attributes
    ----------
    omega
        (points,) rad/s, 0 and inf included, ascending.
    centre
        Frequency of the bilinear warp, rad/s.
    bounds
        On the squared magnitude at these points.
    """

    omega: FloatArray
    centre: float
    bounds: RatioBounds

    def squared_parts(
        self, poles: ComplexArray, zeros: ComplexArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return N and D of poles and zeros as polynomials in x, at the points, both scaled."""
        return self._squared(zeros), self._squared(poles)

    def _squared(self, roots: ComplexArray) -> FloatArray:
        reference = np.full(roots.size, -self.centre, dtype=complex)
        values = factor_magnitude(np.minimum(self.omega, 1e9 * self.centre), reference, roots, 1.0)
        return np.asarray(values**2, dtype=float)

    def settled_gain(self, poles: ComplexArray, zeros: ComplexArray) -> tuple[float, float]:
        """Return the least gain that keeps the radius everywhere, and the excess then, dB."""
        squared = factor_magnitude(self.omega, poles, zeros, 1.0) ** 2
        factor = float((self.bounds.lower / squared).max()) * (1.0 + HEADROOM)
        level = factor * float((squared / self.bounds.upper).max())
        return float(np.sqrt(factor)), float(10.0 * np.log10(level))

    def below_ceiling(self, poles: ComplexArray, zeros: ComplexArray, gain: float) -> bool:
        """Tell whether a weight keeps the ceilings."""
        squared = factor_magnitude(self.omega, poles, zeros, gain) ** 2
        return bool(np.all(squared <= self.bounds.ceiling * (1.0 + 1e-8)))

    def ceiling_bounds(self) -> RatioBounds:
        """Return bounds whose level is |W|^2 over its ceiling: at most 1 where one is kept.

        Where there is no ceiling, 60 dB above the largest radius stands in for it.
        """
        stand_in = NO_CEILING_FACTOR**2 * self.bounds.lower.max()
        ceiling = self.bounds.ceiling
        upper = np.where(np.isfinite(ceiling), ceiling, np.maximum(stand_in, 0.0))
        return replace(self.bounds, upper=upper, ceiling=np.full(upper.size, np.inf))

    def infeasible(self, order: int, deciding: int, *, proven: bool) -> InfeasibleError:
        """Return the error that names the point whose ceiling decides, where one does."""
        known = deciding >= 0 and np.isfinite(self.bounds.ceiling[deciding])
        tightest = int(np.argmin(self.bounds.ceiling / np.maximum(self.bounds.lower, 1e-300)))
        at = deciding if known else tightest
        frequency, cap = float(self.omega[at] / TWO_PI), float(np.sqrt(self.bounds.ceiling[at]))
        found = "there is no weight" if proven else "no weight was found"
        return InfeasibleError(
            f"{found} of order {order} that covers the radius and stays below the cap: "
            f"the cap {cap:.4g} at {frequency:.6g} Hz decides; raise it there or raise the order",
            frequency,
        )


def radius_problem(
    frequency_hz: FloatArray,
    radius: FloatArray,
    order: int,
    *,
    profile: FloatArray | None,
    cap: FloatArray | None,
    ceiling: tuple[FloatArray, FloatArray] | None,
    outside_factor: float,
) -> RadiusProblem:
    """Check the arrays and gather them, ascending, with points outside and further ceilings.

    Raises
    ------
    InputError
        If arrays disagree in length, hold values out of range, or are too short for the order.
    InfeasibleError
        If the cap is below the radius somewhere.
    """
    frequency = np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    radius = np.atleast_1d(np.asarray(radius, dtype=float))
    shape = np.ones_like(radius) if profile is None else np.asarray(profile, dtype=float)
    limit = np.full_like(radius, np.inf) if cap is None else np.asarray(cap, dtype=float)
    _check(frequency, radius, shape, limit, order)
    extra = (np.zeros(0), np.zeros(0)) if ceiling is None else ceiling
    _check_ceiling(extra)
    asked = _Asked(*_merged(TWO_PI * frequency, radius, radius * shape, limit))
    return _gathered(asked, TWO_PI * np.asarray(extra[0], dtype=float), extra[1], outside_factor)


@dataclass(frozen=True)
class _Asked:
    """Lower and upper magnitudes and the cap at distinct ascending omega."""

    omega: FloatArray
    lower: FloatArray
    upper: FloatArray
    cap: FloatArray


def _gathered(
    asked: _Asked, extra_omega: FloatArray, extra_value: FloatArray, outside_factor: float
) -> RadiusProblem:
    positive = asked.omega[asked.omega > 0.0]
    unasked = _unasked(asked, positive, outside_factor)
    zeros, free = np.zeros(extra_omega.size), np.full(extra_omega.size, np.inf)
    omega = np.concatenate([asked.omega, unasked.omega, extra_omega])
    lower = np.concatenate([asked.lower, unasked.lower, zeros])
    upper = np.concatenate([asked.upper, unasked.upper, free])
    cap = np.concatenate([asked.cap, unasked.cap, np.asarray(extra_value, dtype=float)])
    measure = np.zeros(omega.size)
    measure[: asked.omega.size] = _measure(asked.omega, positive)
    centre = float(np.sqrt(positive[0] * positive[-1]))
    order = np.argsort(omega, kind="stable")
    bounds = RatioBounds(
        warped(omega, centre)[order],
        lower[order] ** 2,
        upper[order] ** 2,
        cap[order] ** 2,
        measure[order],
    )
    return RadiusProblem(omega[order], centre, bounds)


def _unasked(asked: _Asked, positive: FloatArray, factor: float) -> _Asked:
    """Points below, above and in wide gaps between those asked for, 0 and inf included.

    Each keeps the looser of its two neighbours' demands, relaxed by the factor; the lower one by
    its cube below and above, where a weight may go on falling.
    """
    count = int(np.ceil(OUTSIDE_DECADES / np.log10(WIDEST_GAP)))
    reach = np.geomspace(WIDEST_GAP, 10.0**OUTSIDE_DECADES, count)
    below = np.append(positive[0] / reach, 0.0) if asked.omega[0] > 0.0 else np.zeros(0)
    gaps = [
        np.geomspace(low, high, int(np.ceil(np.log(high / low) / np.log(WIDEST_GAP))) + 1)[1:-1]
        for low, high in zip(positive[:-1], positive[1:], strict=True)
        if high > WIDEST_GAP * low
    ]
    omega = np.concatenate([below, *gaps, positive[-1] * reach, [np.inf]])
    right = np.searchsorted(asked.omega, omega)
    end = (right == 0) | (right == asked.omega.size)
    left, right = np.maximum(right - 1, 0), np.minimum(right, asked.omega.size - 1)
    return _Asked(
        omega,
        np.minimum(asked.lower[left], asked.lower[right]) / np.where(end, factor**3, factor),
        np.maximum(asked.upper[left], asked.upper[right]) * factor,
        np.maximum(asked.cap[left], asked.cap[right]),
    )


def _measure(omega: FloatArray, positive: FloatArray) -> FloatArray:
    """Half by share of logarithmic frequency, half by count, so that no point vanishes."""
    position = np.log(np.maximum(omega, 0.5 * positive[0]))
    width = np.gradient(position) if omega.size > 1 else np.ones(1)
    return np.asarray(0.5 * width / width.sum() + 0.5 / omega.size, dtype=float)


def _merged(
    omega: FloatArray, lower: FloatArray, upper: FloatArray, cap: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Ascending and distinct; of equal frequencies the strictest demands are kept."""
    distinct, index = np.unique(omega, return_inverse=True)
    low, high = np.zeros(distinct.size), np.full(distinct.size, np.inf)
    limit = high.copy()
    np.maximum.at(low, index, lower)
    np.minimum.at(high, index, upper)
    np.minimum.at(limit, index, cap)
    return distinct, low, high, limit


def _check(
    frequency: FloatArray, radius: FloatArray, profile: FloatArray, cap: FloatArray, order: int
) -> None:
    problems = []
    for name, values in (("radius", radius), ("profile", profile), ("cap", cap)):
        if values.shape != frequency.shape:
            found = f"{values.size} values"
            problems.append(Problem(name, found, f"{frequency.size}, one per frequency"))
    if problems:
        raise InputError(problems)
    if order < 0:
        problems.append(Problem("order", str(order), "0 or more"))
    for name, values, good, expected in (
        ("frequency", frequency, np.isfinite(frequency) & (frequency >= 0.0), "0 Hz or more"),
        ("radius", radius, np.isfinite(radius) & (radius > 0.0), "a finite value above 0"),
        ("profile", profile, np.isfinite(profile) & (profile > 0.0), "a finite value above 0"),
        ("cap", cap, cap > 0.0, "a value above 0 (inf for none)"),
    ):
        problems += _first_bad(name, values, good, frequency, expected)
    count = np.unique(frequency[frequency > 0.0]).size
    if count < max(2 * order + 1, 1):
        expected = f"at least {max(2 * order + 1, 1)} for order {order}"
        problems.append(Problem("frequency", f"{count} different points", expected))
    if problems:
        raise InputError(problems)
    _check_cap(frequency, radius, cap)


def _first_bad(
    name: str, values: FloatArray, good: BoolArray, frequency: FloatArray, expected: str
) -> list[Problem]:
    bad = np.flatnonzero(~good)
    if not bad.size:
        return []
    return [Problem(f"{name} at {frequency[bad[0]]:.6g} Hz", f"{values[bad[0]]:.6g}", expected)]


def _check_cap(frequency: FloatArray, radius: FloatArray, cap: FloatArray) -> None:
    worst = int(np.argmax(radius / cap))
    if radius[worst] > cap[worst]:
        raise InfeasibleError(
            f"the cap {cap[worst]:.4g} at {frequency[worst]:.6g} Hz is below the radius "
            f"{radius[worst]:.4g} that has to be covered there",
            float(frequency[worst]),
        )


def _check_ceiling(ceiling: tuple[FloatArray, FloatArray]) -> None:
    frequency, value = (np.asarray(part, dtype=float) for part in ceiling)
    if frequency.shape != value.shape:
        raise InputError(
            Problem("ceiling", f"{value.size} values", f"{frequency.size}, one per frequency")
        )
    if not (np.all(frequency >= 0.0) and np.all(value > 0.0)):
        raise InputError(Problem("ceiling", "a value out of range", "Hz >= 0 and values above 0"))
