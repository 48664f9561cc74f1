"""Exact zero-order-hold equivalents of second-order terms behind a delay.

A term (r + s q) / (s^2 + c s + w^2) is C (sI - A)^-1 B with A = [[0, 1], [-w^2, -c]], B = [0, 1],
C = [r, q]. With the delay split in l whole periods and a fraction f, the held input gives

    x[k+1] = Phi(T) x[k] + Gamma(T - f) u[k-l] + Phi(T - f) Gamma(f) u[k-l-1],

Phi(t) = e^{At}, Gamma(t) its integral times B. Source: K. J. Astrom and B. Wittenmark,
*Computer-Controlled Systems*, 3rd ed., 1997, section 2.3 (systems with time delay). Modes above
half the rate fold by themselves: Phi knows them only modulo the rate.
"""

from dataclasses import dataclass

import numpy as np

from identkit.plant_set.fields import ComplexArray, FloatArray

# A delay within this share of a whole number of periods is that number: rounding, not a fraction.
WHOLE = 1e-9


@dataclass(frozen=True, eq=False)
class HeldTerms:
    """Second-order terms as seen at the sampling instants; arrays (..., terms).

    Attributes
    ----------
    phi
        (2, 2, ...) entries of e^{AT}.
    now, before
        (2, ...) input columns of the newest input that counts and of the one before it.
    """

    phi: FloatArray
    now: FloatArray
    before: FloatArray

    def states(self, term: int, z: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
        """Return the responses of both states of one term to the input, whole periods apart.

        Parameters
        ----------
        term
            Which one, along the last axis.
        z
            (..., points), leading axes those of the terms.
        """
        (a, b), (c, d) = self.phi[..., term][..., None]
        first, second = (
            self.now[k, ..., term][..., None] + self.before[k, ..., term][..., None] / z
            for k in (0, 1)
        )
        below = 1.0 / (z * z - (a + d) * z + (a * d - b * c))
        return ((z - d) * first + b * second) * below, (c * first + (z - a) * second) * below


def held_terms(
    natural: FloatArray, loss: FloatArray, fraction: FloatArray, period: float
) -> HeldTerms:
    """Return the zero-order-hold equivalents of terms 1 and s over s^2 + loss s + natural^2.

    Parameters
    ----------
    natural, loss
        (..., terms) rad/s; natural 0 (with loss 0) for a double integrator.
    fraction
        (...,) s, the fractional part of the delay, from 0 to below `period`.
    period
        s.
    """
    late = np.asarray(fraction)[..., None]
    phi = transition(natural, loss, np.full_like(natural, period))
    rest = transition(natural, loss, period - late)
    early = _integral(natural, loss, np.broadcast_to(late, natural.shape))
    before = np.stack(
        [
            rest[0, 0] * early[0] + rest[0, 1] * early[1],
            rest[1, 0] * early[0] + rest[1, 1] * early[1],
        ]
    )
    return HeldTerms(phi, _integral(natural, loss, period - late + np.zeros_like(natural)), before)


def split_delay(delay: FloatArray, period: float) -> tuple[FloatArray, FloatArray]:
    """Return whole periods (as numbers) and the fraction (s) of delays in s."""
    periods = np.asarray(delay, dtype=float) / period
    whole = np.floor(periods + WHOLE)
    return whole, np.maximum(periods - whole, 0.0) * period


def transition(natural: FloatArray, loss: FloatArray, time: FloatArray) -> FloatArray:
    """Return (2, 2, ...) e^{At}, one formula for every damping.

    e^{At} = e^{-h t} (cosh(b t) I + sinh(b t)/b (A + h I)), h = loss/2, b^2 = h^2 - natural^2.
    """
    half = 0.5 * loss
    root = np.sqrt(np.asarray(half**2 - natural**2, dtype=complex))
    even = np.cosh(root * time).real
    # sinh(x)/x has no trouble at 0 but its formula has.
    x = root * time
    near = np.abs(x) < 1e-4
    odd = time * np.where(near, 1.0 + x**2 / 6.0, np.sinh(x) / np.where(near, 1.0, x)).real
    fall = np.exp(-half * time)
    return np.asarray(
        fall
        * np.array(
            [[even + half * odd, odd], [-(natural**2) * odd, even - half * odd]], dtype=float
        )
    )


def _integral(natural: FloatArray, loss: FloatArray, time: FloatArray) -> FloatArray:
    """Return (2, ...) Gamma(t): the response of both states to a unit input held for `time`."""
    phi = transition(natural, loss, time)
    still = natural == 0.0
    square = np.where(still, 1.0, natural**2)
    first = (1.0 - phi[1, 1] - loss * phi[0, 1]) / square
    return np.stack([np.where(still, 0.5 * time**2, first), phi[0, 1]])
