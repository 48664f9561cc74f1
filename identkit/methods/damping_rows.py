"""Linear rows that keep the roots of a squared magnitude away from the frequency axis.

Near a pair of roots with damping ratio zeta, P(omega) = |p(j omega)|^2 goes with the relative
distance e as e^2 + zeta^2. It keeps P(omega) >= P(omega (1 +- h)) / 2 at every e exactly if
zeta >= sqrt(2) h (the worst place is e = h). The rows are linear in the coefficients of P, so
optimality among pairs that keep them is kept; as the rule is exact only for one narrow pair alone,
the roots are looked at afterwards and the rows tightened.

Derived here.
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.margin_program import HardRows
from identkit.methods.spectral_factor import damping_ratios

SHARE = 0.5
NEIGHBOURHOOD = np.linspace(-2.0, 2.0, 9)


def offending(roots: ComplexArray, floor: float) -> ComplexArray:
    """Return the roots in s whose damping ratio is below the floor, one of each pair."""
    return roots[(damping_ratios(roots) < floor) & (roots.imag >= 0.0)]


def rows_around(
    roots: ComplexArray, damping: float, centre: float, *, on_numerator: bool
) -> HardRows:
    """Return rows around the natural frequencies of these roots.

    Parameters
    ----------
    roots
        (roots,) rad/s.
    damping
        Damping ratio to keep.
    centre
        Frequency of the bilinear warp, rad/s.
    on_numerator
        True for zeros, false for poles.
    """
    spacing = damping / np.sqrt(2.0)
    at = (np.abs(roots)[:, None] * np.exp(spacing * NEIGHBOURHOOD)).ravel()
    positions = np.concatenate([at, at, at])
    beside = np.concatenate([at * np.exp(spacing), at * np.exp(-spacing), at])
    share = np.repeat([SHARE, SHARE, 0.0], at.size)
    mask = np.full(positions.size, on_numerator)
    return HardRows(warped(positions, centre), warped(beside, centre), share, mask)


def warped(omega: FloatArray, centre: float) -> FloatArray:
    """Return x = (1 - u) / (1 + u), u = (omega / centre)^2: 1 at rest, -1 at infinity."""
    finite = np.isfinite(omega)
    u = np.square(np.where(finite, omega, 0.0) / centre)
    return np.where(finite, (1.0 - u) / (1.0 + u), -1.0)
