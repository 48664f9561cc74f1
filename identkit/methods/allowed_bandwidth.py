"""The highest crossover of a standard second-order loop that a set of plants allows.

The complementary sensitivity is T = T0 A with

    T0 = w0^2 / (s^2 + 2 zeta w0 s + w0^2),    zeta = 1/sqrt(2),

and A the all-pass of what no stabilising controller can remove: the nominal's delay and its zeros
in the right half-plane (Blaschke product: M. Morari and E. Zafiriou, *Robust Process Control*,
Prentice Hall 1989, section 3.3). Where the nominal has a double integrator, T0 gets the zero that
makes 1 - T vanish twice at rest, as internal stability asks. The loop is robustly stable when
|W T| < 1 (multiplicative), |W T / P0| < 1 (additive) or |W (1 - T)| < 1 (inverse multiplicative) at
all frequencies (J. C. Doyle, B. A. Francis, A. R. Tannenbaum, *Feedback Control Theory*, 1992,
table 4.1). For the first two |A| = 1 plays no part in the condition, T0 grows with w0 at every
frequency, and the bound on w0 is the least of f / (m^2 - 1)^(1/4) over the frequencies where
m = |W| (or |W/P0|) exceeds 1.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import brentq, minimize_scalar

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import TWO_PI

Size = Callable[[FloatArray], FloatArray]
DAMPING_RATIO = float(np.sqrt(0.5))
PER_DECADE = 40
REFINED_SHARE = 1.3


@dataclass(frozen=True)
class Unremovable:
    """What of the nominal every complementary sensitivity has to carry.

    Attributes
    ----------
    zeros
        (zeros,) in the right half-plane, rad/s, closed under conjugation.
    delay
        s.
    integrators
        Poles of the nominal at rest: 0, 1 or 2.
    """

    zeros: ComplexArray = field(default_factory=lambda: np.zeros(0, dtype=complex))
    delay: float = 0.0
    integrators: int = 0

    def all_pass(self, frequency: FloatArray) -> ComplexArray:
        """Return A at (points,) Hz: prod (z - s)/(conj(z) + s) e^{-s delay}, 1 at rest."""
        s = 1j * TWO_PI * np.asarray(frequency, dtype=float)
        value = np.exp(-s * self.delay)
        for zero in self.zeros:
            value = value * (zero - s) / (np.conj(zero) + s) * (np.conj(zero) / zero)
        return np.asarray(value, dtype=complex)

    @property
    def lag(self) -> float:
        """-A'(0), s."""
        return self.delay + float(np.sum(2.0 * (1.0 / self.zeros).real))


@dataclass(frozen=True)
class AllowedBandwidth:
    """What the yardstick loop reaches.

    Attributes
    ----------
    crossover
        Lowest frequency at which |T/(1 - T)| = 1, Hz; 0 where no such loop is robustly stable.
    natural_frequency
        w0, Hz; infinite where the set sets no limit (the delay and zeros of the nominal still do).
    limited_at
        Hz, where the condition is met with equality; NaN where the set sets no limit.
    """

    crossover: float
    natural_frequency: float
    limited_at: float


def bandwidth_of_curve(
    frequency: FloatArray,
    size: FloatArray,
    carried: Unremovable,
    condition: str = "complementary",
) -> AllowedBandwidth:
    """Return `allowed_bandwidth` for m known at points only: the condition is asked there alone.

    Parameters
    ----------
    frequency, size
        (points,) Hz, increasing, and m.
    carried, condition
        As there.
    """
    if condition == "complementary" and carried.integrators < 2:
        allowed = limiting_frequency(frequency, size)
        k = int(allowed.argmin())
        natural, place = float(allowed[k]), float(frequency[k])
        if not np.isfinite(natural):
            place = np.nan
    else:
        natural, place = _scanned(None, frequency, size, carried, condition)
    if natural <= 0.0:
        return AllowedBandwidth(0.0, 0.0, place)
    return AllowedBandwidth(crossover(natural, frequency, carried), natural, place)


def allowed_bandwidth(
    size: Size, grid: FloatArray, carried: Unremovable, condition: str = "complementary"
) -> AllowedBandwidth:
    """Return the highest crossover of the standard loop that stays robustly stable.

    Parameters
    ----------
    size
        Returns m at (points,) Hz: |W| or |W/P0| for "complementary" (m |T| < 1), |W| for
        "sensitivity" (m |1 - T| < 1).
    grid
        (points,) Hz, increasing, wide and fine enough for the weight; refined between its points.
    carried
        Delay, right half-plane zeros and integrators of the nominal.
    condition
        "complementary" or "sensitivity".

    Notes
    -----
    The nominal must have no poles in the open right half-plane: they would have to be interpolated
    by T as well.
    """
    if condition == "complementary" and carried.integrators < 2:
        natural, place = _least_over_band(size, grid)
    else:
        natural, place = _scanned(size, grid, size(grid), carried, condition)
    if natural <= 0.0:
        return AllowedBandwidth(0.0, 0.0, place)
    return AllowedBandwidth(crossover(natural, grid, carried), natural, place)


def limiting_frequency(frequency: FloatArray, size: FloatArray) -> FloatArray:
    """Return the w0 (Hz) that each frequency allows where m |T0| < 1; infinite where m <= 1.

    Parameters
    ----------
    frequency, size
        (..., points) Hz and m.
    """
    above = np.maximum(size**2 - 1.0, 0.0)
    with np.errstate(divide="ignore"):
        return np.asarray(np.where(above > 0.0, frequency / above**0.25, np.inf))


def complementary(frequency: FloatArray, natural: float, carried: Unremovable) -> ComplexArray:
    """Return T at (points,) Hz for w0 = `natural` Hz."""
    all_pass = carried.all_pass(frequency)
    if not np.isfinite(natural):
        return all_pass
    s = 1j * np.asarray(frequency, dtype=float) / natural
    top = np.ones(s.shape, dtype=complex)
    if carried.integrators > 1:
        top = top + s * (2.0 * DAMPING_RATIO + carried.lag * TWO_PI * natural)
    return np.asarray(all_pass * top / (s * s + 2.0 * DAMPING_RATIO * s + 1.0))


def crossover(natural: float, grid: FloatArray, carried: Unremovable) -> float:
    """Return the lowest frequency (Hz) at which |T/(1 - T)| = 1, that is Re T = 1/2."""
    extra = natural * np.geomspace(1e-3, 1e2, 400) if np.isfinite(natural) else np.zeros(0)
    points = np.unique(np.concatenate([grid, extra]))

    def above(frequency: float) -> float:
        return float(complementary(np.array([frequency]), natural, carried).real[0] - 0.5)

    values = complementary(points, natural, carried).real - 0.5
    below = np.flatnonzero(values < 0.0)
    if not below.size:
        return np.inf
    first = int(below[0])
    if first == 0:
        return float(points[0])
    return float(brentq(above, points[first - 1], points[first], rtol=1e-12))


def _least_over_band(size: Size, grid: FloatArray) -> tuple[float, float]:
    """Return the least limiting frequency, refined between points, and where it stands."""
    values = limiting_frequency(grid, size(grid))
    if not np.isfinite(values).any():
        return np.inf, np.nan
    best, place = float(values.min()), float(grid[int(values.argmin())])
    padded = np.concatenate([[np.inf], values, [np.inf]])
    lowest = (values <= padded[:-2]) & (values <= padded[2:]) & (values <= REFINED_SHARE * best)
    for k in np.flatnonzero(lowest).tolist():
        bounds = grid[max(k - 1, 0)], grid[min(k + 1, grid.size - 1)]
        found = minimize_scalar(
            lambda f: float(limiting_frequency(np.array([f]), size(np.array([f])))[0]),
            bounds=bounds,
            method="bounded",
            options={"xatol": 1e-12 * bounds[1]},
        )
        if found.fun < best:
            best, place = float(found.fun), float(found.x)
    return (0.0, float(grid[0])) if place <= grid[0] else (best, place)


def _scanned(
    size: Size | None,
    grid: FloatArray,
    weight: FloatArray,
    carried: Unremovable,
    condition: str,
) -> tuple[float, float]:
    """Return the highest feasible w0 of a scan, bisected: feasibility need not be monotone."""

    def worst(natural: float) -> tuple[float, float]:
        return _worst(natural, grid, weight, size, carried, condition)

    # Beyond any finite crossover 1 - T is 1, however high: |W| has to end below 1 there.
    ends_below = condition == "complementary" or weight[-1] < 1.0
    if ends_below and worst(np.inf)[0] < 1.0 and carried.integrators < 2:
        return np.inf, np.nan
    decades = np.log10(grid[-1] / grid[0])
    trials = np.geomspace(grid[0], grid[-1], 2 + int(PER_DECADE * decades))
    fails = trials[-1]
    for trial in trials[::-1]:
        if worst(float(trial))[0] < 1.0:
            break
        fails = trial
    else:
        return 0.0, worst(float(trials[0]))[1]
    if trial == trials[-1]:
        return float(trial), np.nan
    low, high = float(trial), float(fails)
    while high - low > 1e-9 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if worst(middle)[0] < 1.0 else (low, middle)
    return low, worst(high)[1]


def _worst(
    natural: float,
    grid: FloatArray,
    weight: FloatArray,
    size: Size | None,
    carried: Unremovable,
    condition: str,
) -> tuple[float, float]:
    """Return the largest m |T| or m |1 - T| and where, refined around the largest point."""
    values = weight * _closed(grid, natural, carried, condition)
    k = int(values.argmax())
    if size is None:
        return float(values[k]), float(grid[k])
    bounds = grid[max(k - 1, 0)], grid[min(k + 1, grid.size - 1)]

    def below(f: float) -> float:
        one = np.array([f])
        return -float((size(one) * _closed(one, natural, carried, condition))[0])

    found = minimize_scalar(below, bounds=bounds, method="bounded")
    if -found.fun > values[k]:
        return -float(found.fun), float(found.x)
    return float(values[k]), float(grid[k])


def _closed(
    frequency: FloatArray, natural: float, carried: Unremovable, condition: str
) -> FloatArray:
    t = complementary(frequency, natural, carried)
    return np.abs(t if condition == "complementary" else 1.0 - t)
