"""Largest gain of a state-space system within a band, exact to a stated tolerance.

A level gamma is a singular value of G(j omega) exactly where a Hamiltonian matrix has the
eigenvalue j omega (S. Boyd, V. Balakrishnan, P. Kabamba, "A bisection method for computing the
H-infinity norm of a transfer matrix and related problems", Mathematics of Control, Signals and
Systems 2, 1989, 207-219). The level climbs through the midpoints of the intervals found
(N. A. Bruinsma, M. Steinbuch, "A fast algorithm to compute the H-infinity norm of a transfer
function matrix", Systems & Control Letters 14(4), 1990, 287-293); crossings outside the band are
left out.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray
from identkit.methods.modal_model import TWO_PI
from identkit.methods.state_space import StateSpace, frequency_response

AXIS_TOLERANCE = 1e-6
HIGHEST_ROUNDS = 60


@dataclass(frozen=True)
class BandNorm:
    """Supremum of the largest singular value over a band.

    Attributes
    ----------
    norm
        The largest value found, attained at `frequency`.
    frequency
        Hz.
    tolerance
        No point of the band exceeds norm * (1 + tolerance).
    """

    norm: float
    frequency: float
    tolerance: float


def band_norm(system: StateSpace, low: float, high: float, tolerance: float = 1e-8) -> BandNorm:
    """Return the largest gain of `system` over [low, high] by the Hamiltonian level test.

    Parameters
    ----------
    system
        Any system without poles on the axis inside the band; it need not be stable.
    low, high
        Hz, 0 <= low < high; high may be infinite.
    tolerance
        Relative.

    Raises
    ------
    ArithmeticError
        If a pole lies on the axis inside the band, where no norm exists.
    """
    _refuse_axis_poles(system, low, high)
    points = _first_points(system, low, high)
    norm, frequency = _largest_gain(system, points)
    for _ in range(HIGHEST_ROUNDS):
        level = norm * (1.0 + tolerance) + np.finfo(float).tiny
        edges = level_frequencies(system, level)
        edges = edges[(edges > low) & (edges < high)]
        if not edges.size:
            return BandNorm(norm, frequency, tolerance)
        bounds = np.concatenate([[low], edges, [min(high, 2.0 * edges[-1])]])
        middle = np.concatenate([0.5 * (bounds[1:] + bounds[:-1]), edges])
        gain, place = _largest_gain(system, middle)
        if gain <= level:
            return BandNorm(max(norm, gain), frequency if norm >= gain else place, tolerance)
        norm, frequency = gain, place
    raise ArithmeticError(
        f"the norm over {low:g} to {high:g} Hz still grows at {norm:.3g} near {frequency:g} Hz"
    )


def _refuse_axis_poles(system: StateSpace, low: float, high: float) -> None:
    poles = system.poles() / TWO_PI if system.states else np.zeros(0, dtype=complex)
    on_axis = np.abs(poles.real) <= 1e-14 * np.abs(poles)
    inside = on_axis & (np.abs(poles) >= low) & (np.abs(poles) <= high)
    if inside.any():
        place = float(np.abs(poles[inside][0]))
        raise ArithmeticError(f"a pole lies on the axis at {place:g} Hz: the gain has no bound")


def level_frequencies(system: StateSpace, level: float) -> FloatArray:
    """Return the frequencies (Hz) at which `level` is a singular value, with near misses.

    Eigenvalues within 1e-6 of the axis count: a false hit costs one evaluation, a missed one would
    cost the certificate.
    """
    eigenvalues = np.linalg.eigvals(_hamiltonian(system, level))
    near = np.abs(eigenvalues.real) <= AXIS_TOLERANCE * np.abs(eigenvalues)
    return np.unique(np.abs(eigenvalues.imag[near])) / TWO_PI


def _hamiltonian(system: StateSpace, level: float) -> FloatArray:
    a, b, c, d = system.A, system.B / np.sqrt(level), system.C / np.sqrt(level), system.D / level
    gap = np.eye(d.shape[1]) - d.T @ d
    drift = a + b @ np.linalg.solve(gap, d.T @ c)
    forced = b @ np.linalg.solve(gap, b.T)
    seen = c.T @ (c + d @ np.linalg.solve(gap, d.T @ c))
    return np.block([[drift, forced], [-seen, -drift.T]])


def _first_points(system: StateSpace, low: float, high: float) -> FloatArray:
    """Return the band's edges and the resonance frequency of every pole inside it."""
    poles = system.poles() / TWO_PI if system.states else np.zeros(0)
    square = np.abs(poles) ** 2 - 2.0 * poles.real**2
    peaks = np.concatenate([np.sqrt(square[square > 0.0]), np.abs(poles)])
    inside = peaks[(peaks > low) & (peaks < high)]
    top = high if np.isfinite(high) else 1e6 * max(1.0, float(np.max(np.abs(poles), initial=1.0)))
    return np.unique(np.concatenate([[low, top], inside]))


def _largest_gain(system: StateSpace, frequency: FloatArray) -> tuple[float, float]:
    gains = np.linalg.norm(frequency_response(system, frequency), 2, axis=(1, 2))
    place = int(np.argmax(gains))
    return float(gains[place]), float(frequency[place])
