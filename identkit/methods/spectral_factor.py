"""Stable minimum-phase factor of a squared magnitude given as a ratio of polynomials.

Of every pair of roots (s, -s) of N and D, taken as functions of s, the one in the left half plane
is kept: W = gain prod(s - z) / prod(s - p) with |W(j omega)|^2 = N/D.

Sources: L. Fejer, "Ueber trigonometrische Polynome", J. reine angew. Math. 146, 53-82, 1916, and
F. Riesz (existence); D. C. Youla, "On the factorization of rational matrices", IRE Trans.
Information Theory 7(3), 172-189, 1961. Roots come from the comrade matrix of the basis and are then
polished by Gauss-Newton on the logarithm of the polynomial's own values, which restores relative
accuracy over many decades of frequency.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arnoldi_basis import ArnoldiBasis
from identkit.methods.arrays import ComplexArray, FloatArray

POLISHING_STEPS = 6


@dataclass(frozen=True)
class WarpedPolynomial:
    """A positive polynomial in x = (1 - u) / (1 + u), u = (omega / centre)^2.

    Attributes
    ----------
    basis, coefficients
        The polynomial.
    u, values
        (points,) finite abscissae and its values there, which are known to higher relative
        accuracy than the coefficients can tell.
    """

    basis: ArnoldiBasis
    coefficients: FloatArray
    u: FloatArray
    values: FloatArray


def squared_roots(polynomial: WarpedPolynomial) -> ComplexArray:
    """Return the roots in u = (omega / centre)^2, closed under conjugation, polished."""
    x = polynomial.basis.roots(polynomial.coefficients)
    u = _closed_under_conjugation(_unwarped(x, polynomial.u))
    for _ in range(POLISHING_STEPS):
        step = _polishing_step(u, polynomial)
        if step is None:
            break
        u = u * (1.0 + step)
        if np.abs(step).max() < 1e-13:
            break
    return u


def left_half_plane(squared: ComplexArray, centre: float) -> ComplexArray:
    """Return the roots in s, rad/s, that lie in the left half plane; `centre` in rad/s.

    Positive roots in u, which a positive polynomial has not, come from rounding at a double root
    on the frequency axis or between two points: they are joined to pairs on the axis.
    """
    positive = (squared.imag == 0.0) & (squared.real > 0.0)
    roots = -np.sqrt(-squared[~positive])
    axis = np.sort(np.sqrt(squared[positive].real))
    low, high = axis[: axis.size // 2 * 2 : 2], axis[1::2]
    joined = 1j * np.sqrt(low * high)
    lonely = -axis[2 * low.size :] + 0.0j
    return np.asarray(
        centre * np.concatenate([roots, joined, joined.conj(), lonely]), dtype=complex
    )


def damping_ratios(roots: ComplexArray) -> FloatArray:
    """Return -Re(s)/|s| of poles or zeros."""
    return np.asarray(-roots.real / np.abs(roots), dtype=float)


def factor_magnitude(
    omega: FloatArray, poles: ComplexArray, zeros: ComplexArray, gain: float
) -> FloatArray:
    """Return |gain prod(j omega - z) / prod(j omega - p)|; poles and zeros equal in number.

    Numerators and denominators are paired one by one, so nothing overflows.
    """
    magnitude = np.full(omega.shape, abs(gain))
    finite = np.isfinite(omega)
    s = 1j * omega[finite]
    for zero, pole in zip(_by_size(zeros), _by_size(poles), strict=True):
        magnitude[finite] *= np.abs((s - zero) / (s - pole))
    return magnitude


def _by_size(roots: ComplexArray) -> ComplexArray:
    return roots[np.argsort(np.abs(roots))]


def _unwarped(x: ComplexArray, u: FloatArray) -> ComplexArray:
    """Return (1 - x) / (1 + x), kept away from 0 and infinity."""
    squared = (1.0 - x) / np.where(x == -1.0, 1e-300, 1.0 + x)
    least, largest = 1e-12 * float(u[u > 0.0].min()), 1e12 * float(u.max())
    squared = np.where(np.abs(squared) > largest, -largest, squared)
    return np.asarray(np.where(np.abs(squared) < least, -least, squared), dtype=complex)


def _closed_under_conjugation(roots: ComplexArray) -> ComplexArray:
    """Pair the complex roots exactly."""
    upper = roots[roots.imag > 0.0]
    return np.concatenate([roots[roots.imag == 0.0], upper, upper.conj()])


def _polishing_step(roots: ComplexArray, polynomial: WarpedPolynomial) -> ComplexArray | None:
    """Relative step of every root that fits log P at the points; None if it is not small."""
    if roots.size == 0:
        return None
    u = polynomial.u
    model = np.ones(u.size)
    for root in roots:
        model = model * np.abs((u - root) / ((1.0 + u) * (1.0 + abs(root))))
    if model.min() <= 0.0:
        return None
    misfit = np.log(polynomial.values / model)
    real, upper = roots.imag == 0.0, roots.imag > 0.0
    slope_real = -(roots[real] / (u[:, None] - roots[real])).real
    slope_pair = -2.0 * (roots[upper] / (u[:, None] - roots[upper]))
    jacobian = np.hstack([np.ones((u.size, 1)), slope_real, slope_pair.real, -slope_pair.imag])
    solution = np.linalg.lstsq(jacobian, misfit, rcond=1e-14)[0][1:]
    count, pairs = int(real.sum()), int(upper.sum())
    step = np.zeros(roots.size, dtype=complex)
    step[real] = solution[:count]
    step[upper] = solution[count : count + pairs] + 1j * solution[count + pairs :]
    step[roots.imag < 0.0] = step[upper].conj()
    return step if np.abs(step).max() < 0.1 else None
