"""Gain, phase, delay, modulus and disk margins of a scalar loop.

Gain and phase margins: H. W. Bode, *Network Analysis and Feedback Amplifier Design*, 1945. Modulus
margin, the least distance of L to -1: K. J. Astrom and R. M. Murray, *Feedback Systems*, 2008,
section 9.3 (stability margin). Disk margin, the largest alpha for which gain and phase may vary
together by (2 + alpha d)/(2 - alpha d), |d| < 1: P. Seiler, A. Packard, P. Gahinet, "An
introduction to disk margins", IEEE Control Systems Magazine 40(5), 2020, 78-95 (zero skew).
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy import linalg
from scipy.optimize import brentq, minimize_scalar

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.bounded_real_norm import band_norm, level_frequencies
from identkit.methods.feedback import sensitivity
from identkit.methods.modal_model import TWO_PI
from identkit.methods.resonance_grid import resonance_grid
from identkit.methods.state_space import StateSpace, frequency_response, negative, parallel

Respond = Callable[[FloatArray], ComplexArray]
REFINED_SHARE = 1.5
ASIDE = 1e-6


@dataclass(frozen=True)
class StabilityMargins:
    """How far a loop is from -1; frequencies in Hz, NaN where there is no such place.

    Attributes
    ----------
    gain_up, gain_up_frequency
        Smallest factor above 1 on the gain that brings L to -1; infinite where none does.
    gain_down, gain_down_frequency
        Largest factor below 1 that does; 0 where none does.
    phase, phase_frequency
        Smallest phase change, lag or lead, that does, degrees; infinite where |L| is never 1.
    delay, delay_frequency
        Smallest further delay that does, s; infinite likewise.
    modulus, modulus_frequency
        Least |1 + L|, the reciprocal of the largest sensitivity.
    disk
        Largest alpha of the disk margin.
    crossover
        Highest frequency at which |L| is 1; NaN where it never is.
    """

    gain_up: float
    gain_up_frequency: float
    gain_down: float
    gain_down_frequency: float
    phase: float
    phase_frequency: float
    delay: float
    delay_frequency: float
    modulus: float
    modulus_frequency: float
    disk: float
    crossover: float


def margins_from_response(respond: Respond, grid: FloatArray) -> StabilityMargins:
    """Return the margins of a loop from its response, refined between the points of a grid.

    The margins say how far the curve is from -1, whatever its windings: they are stability
    margins only of a loop known to be stable. Crossings between two neighbouring points of the
    grid that undo each other are not seen.

    Parameters
    ----------
    respond
        Returns L at (points,) Hz, (points,).
    grid
        (points,) Hz, increasing, fine enough for the resonances of the loop.
    """
    values = respond(grid)
    up, down = _gain_margins(respond, grid, values)
    phase, delay, crossover = _phase_margins(respond, grid, values)
    modulus = _least(lambda f: np.abs(1.0 + respond(f)), grid)
    # 2 (1 + L)/(1 - L): the same search in the disk's own coordinate.
    disk, _ = _least(lambda f: _disk_distance(respond(f)), grid)
    return StabilityMargins(*up, *down, *phase, *delay, *modulus, disk, crossover)


def _disk_distance(loop: ComplexArray) -> FloatArray:
    below = np.abs(1.0 - loop)
    return np.asarray(2.0 * np.abs(1.0 + loop) / np.maximum(below, np.finfo(float).tiny))


def _gain_margins(
    respond: Respond, grid: FloatArray, values: ComplexArray
) -> tuple[tuple[float, float], tuple[float, float]]:
    places = _crossings(lambda f: respond(f).imag, grid, values.imag)
    real = respond(places).real
    factor, at = -1.0 / real[real < 0.0], places[real < 0.0]
    above, below = factor >= 1.0, factor < 1.0
    up, down = (np.inf, np.nan), (0.0, np.nan)
    if above.any():
        best = int(np.argmin(factor[above]))
        up = float(factor[above][best]), float(at[above][best])
    if below.any():
        best = int(np.argmax(factor[below]))
        down = float(factor[below][best]), float(at[below][best])
    return up, down


def _phase_margins(
    respond: Respond, grid: FloatArray, values: ComplexArray
) -> tuple[tuple[float, float], tuple[float, float], float]:
    with np.errstate(divide="ignore"):
        logs = np.log(np.abs(values))
    places = _crossings(lambda f: np.log(np.abs(respond(f))), grid, logs)
    if not places.size:
        return (np.inf, np.nan), (np.inf, np.nan), np.nan
    lag = np.mod(np.angle(respond(places)) + np.pi, TWO_PI)
    either = np.minimum(lag, TWO_PI - lag)
    delay = lag / (TWO_PI * places)
    first, soonest = int(np.argmin(either)), int(np.argmin(delay))
    phase = float(np.degrees(either[first])), float(places[first])
    return phase, (float(delay[soonest]), float(places[soonest])), float(places.max())


def _crossings(
    function: Callable[[FloatArray], FloatArray], grid: FloatArray, values: FloatArray
) -> FloatArray:
    """Return where a function changes its sign between points, to rounding."""

    def at(logarithm: float) -> float:
        return float(function(np.array([np.exp(logarithm)]))[0])

    changes = np.flatnonzero(values[1:] * values[:-1] < 0.0)
    logs = np.log(grid)
    found = [np.exp(brentq(at, logs[k], logs[k + 1], xtol=1e-14, rtol=1e-14)) for k in changes]
    return np.array([*found, *grid[values == 0.0]], dtype=float)


def _least(function: Callable[[FloatArray], FloatArray], grid: FloatArray) -> tuple[float, float]:
    """Return the least value and its place, local minima near the least refined."""
    values = function(grid)
    padded = np.concatenate([[np.inf], values, [np.inf]])
    lowest = (values <= padded[:-2]) & (values <= padded[2:])
    best, place = float(values.min()), float(grid[int(values.argmin())])
    for k in np.flatnonzero(lowest & (values <= REFINED_SHARE * best)).tolist():
        left, right = grid[max(k - 1, 0)], grid[min(k + 1, grid.size - 1)]
        found = minimize_scalar(
            lambda f: float(function(np.array([f]))[0]),
            bounds=(left, right),
            method="bounded",
            options={"xatol": 1e-12 * right},
        )
        if found.fun < best:
            best, place = float(found.fun), float(found.x)
    return best, place


def margins_of_loop(
    loop: StateSpace, delay: float = 0.0, low: float = 0.0, high: float = np.inf
) -> StabilityMargins:
    """Return the margins of a loop from its matrices, its delay exact.

    Gain crossovers come from the eigenvalues of a Hamiltonian matrix, crossings of the real axis
    from the zeros of L(s) - L(-s); without delay the modulus margin comes from the exact norm of
    the sensitivity. With delay the crossings of the real axis and the modulus are searched on a
    grid that is fine at every pole of loop and closed loop and follows the delay.

    Parameters
    ----------
    loop
        L = P C, scalar, without the delay.
    delay
        s, multiplies L by e^{-s delay}.
    low, high
        Hz, where to look; by default a hundredth of the slowest to a hundred times the fastest
        pole.
    """
    grid = loop_grid(loop, delay, low, high)

    def respond(frequency: FloatArray) -> ComplexArray:
        rational = frequency_response(loop, frequency)[:, 0, 0]
        return np.asarray(rational * np.exp(-1j * TWO_PI * frequency * delay))

    found = margins_from_response(respond, grid)
    if delay or abs(1.0 + loop.D[0, 0]) < 1e-9:
        return found
    # The exact norm finds the right valley; the refinement is the finer of the two inside it.
    peak = band_norm(sensitivity(loop), float(grid[0]), float(grid[-1]))
    if found.modulus <= 1.0 / peak.norm:
        return found
    return replace(found, modulus=1.0 / peak.norm, modulus_frequency=peak.frequency)


def loop_grid(
    loop: StateSpace, delay: float = 0.0, low: float = 0.0, high: float = np.inf
) -> FloatArray:
    """Return the frequencies (Hz) at which `margins_of_loop` looks; arguments as there."""
    poles = np.concatenate([loop.poles(), _closed_poles(loop)]) / TWO_PI
    poles = poles[np.abs(poles) > 1e-12 * np.max(np.abs(poles), initial=1.0)]
    sizes = np.abs(poles) if poles.size else np.ones(1)
    bottom = low if low > 0.0 else 0.01 * float(sizes.min())
    top = high if np.isfinite(high) else 100.0 * float(sizes.max())
    damping = np.abs(poles.real) / np.maximum(np.abs(poles), np.finfo(float).tiny)
    grid = resonance_grid(bottom, top, np.abs(poles), damping)
    exact = np.concatenate([_unit_gain(loop), _real_axis(loop) if not delay else np.zeros(0)])
    # Two points close around every exact crossing: the sign change cannot be missed.
    exact = exact[(exact > bottom) & (exact < top)]
    turns = np.zeros(0)
    if delay:
        turns = np.arange(bottom, min(top, 200.0 / delay), 0.02 / delay)
    near = np.concatenate([exact * (1.0 - ASIDE), exact * (1.0 + ASIDE), turns])
    return np.unique(np.concatenate([grid, near[(near > bottom) & (near < top)]]))


def _closed_poles(loop: StateSpace) -> ComplexArray:
    below = 1.0 + loop.D[0, 0]
    if abs(below) < 1e-9 or not loop.states:
        return np.zeros(0, dtype=complex)
    return np.asarray(np.linalg.eigvals(loop.A - loop.B @ loop.C / below), dtype=complex)


def _unit_gain(loop: StateSpace) -> FloatArray:
    if not loop.states or abs(abs(loop.D[0, 0]) - 1.0) < 1e-9:
        return np.zeros(0)
    return level_frequencies(loop, 1.0)


def _real_axis(loop: StateSpace) -> FloatArray:
    """Return the frequencies (Hz) at which L is real: axis zeros of L(s) - L(-s)."""
    if not loop.states:
        return np.zeros(0)
    mirrored = StateSpace(-loop.A, -loop.B, loop.C, loop.D)
    odd = parallel([loop, negative(mirrored)])
    size = odd.states
    pencil = np.block([[odd.A, odd.B], [odd.C, np.zeros((1, 1))]])
    shift = np.zeros_like(pencil)
    shift[:size, :size] = np.eye(size)
    top, bottom = linalg.eigvals(pencil, shift, homogeneous_eigvals=True)
    finite = np.abs(bottom) > 1e-14 * np.abs(top)
    zeros = top[finite] / bottom[finite]
    near = np.abs(zeros.real) <= 1e-5 * np.abs(zeros)
    return np.unique(np.abs(zeros.imag[near])) / TWO_PI
