"""Every frequency at which the gain of a scalar rational function crosses a level.

|G(j omega)| = level where F = level^2 - G(s) G(-s) vanishes on the axis: the eigenvalues on the
axis of the Hamiltonian matrix of S. Boyd, V. Balakrishnan, P. Kabamba (Mathematics of Control,
Signals and Systems 2, 1989, 207-219). F is even, a function of lambda = s^2 with half as many zeros
(C. F. Van Loan, Linear Algebra and its Applications 61, 1984, 233-251).

Squaring in state space would lose the deep minima of a nominal. F is therefore kept as its values
at real nodes, one below each of its known poles, each with full relative accuracy, and interpolated
with its true denominator (J.-P. Berrut, L. N. Trefethen, "Barycentric Lagrange interpolation", SIAM
Review 46(3), 2004, 501-517). In z = 1/(lambda - shift), poles zeta_k, nodes z_j:

    F prod (z - zeta_k)/(z - z_j) = F(shift) + sum_j b_j/(z - z_j),
    b_j = F_j prod_k (z_j - zeta_k) / prod_{i != j} (z_j - z_i),

whose zeros are the eigenvalues of a real diagonal matrix less a rank-one term (G. H. Golub, "Some
modified matrix eigenvalue problems", SIAM Review 15(2), 1973, 318-334).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

NEAR_REAL = 1e-4
NODE_GAP = 1e-4
SHIFTS = (0.5, 0.25, 0.75)
GOOD_SHIFT = 1e-2


@dataclass(frozen=True)
class SquaredGain:
    """G(s) G(-s) of a real rational G, by its values and its poles.

    Attributes
    ----------
    on_axis
        Returns |G(j omega)|^2 at angular frequencies (points,) rad/s.
    off_axis
        Returns G(s) G(-s) at one real s > 0, rad/s.
    poles
        (terms,) poles of G with conjugates, rad/s; infinite ones for a numerator of higher degree.
        Numerators of no higher degree than there are poles.
    """

    on_axis: Callable[[FloatArray], FloatArray]
    off_axis: Callable[[float], float]
    poles: ComplexArray


class LevelCrossings:
    """Level test of one function over a band.

    Parameters
    ----------
    gain
        The function.
    low, high
        rad/s, 0 < low < high.
    """

    def __init__(self, gain: SquaredGain, low: float, high: float) -> None:
        self.gain, self.low, self.high = gain, low, high
        self.nodes = _nodes(gain.poles, low, high)
        self.values = gain.on_axis(self.nodes)
        self._shifted = [_Shifted(self, low * (high / low) ** share) for share in SHIFTS]

    def at(self, level: float) -> FloatArray:
        """Return the angular frequencies in the band at which |G| = level, near misses included.

        Zeros within 1e-4 of the axis are reported too: a false hit costs one evaluation, a missed
        one would cost the certificate.
        """
        squares = self._zeros(level)
        near = (np.abs(squares.imag) <= NEAR_REAL * np.abs(squares)) & (squares.real < 0.0)
        return self._inside(np.sqrt(-squares[near].real))

    def mismatch(self, level: float) -> float:
        """Return how far |G| is from `level`, relative, at the worst crossing in the band.

        A check of the test on itself: small where its digits suffice, infinite where it finds no
        crossing at all, so ask for a level that is known to be crossed.
        """
        squares = self._zeros(level)
        real = squares[(squares.imag == 0.0) & (squares.real < 0.0)].real
        omega = self._inside(np.sqrt(-real))
        if not omega.size:
            return np.inf
        return float(np.max(np.abs(np.sqrt(self.gain.on_axis(omega)) / level - 1.0)))

    def _inside(self, omega: FloatArray) -> FloatArray:
        return np.unique(omega[(omega > self.low) & (omega < self.high)])

    def _zeros(self, level: float) -> ComplexArray:
        if not self.nodes.size:
            return np.zeros(0, dtype=complex)
        quality = [shifted.quality(level) for shifted in self._shifted]
        best = next((k for k, good in enumerate(quality) if good > GOOD_SHIFT), None)
        chosen = self._shifted[int(np.argmax(quality)) if best is None else best]
        return chosen.zeros(level, self.values)


class _Shifted:
    """The interpolant around one shift."""

    def __init__(self, test: LevelCrossings, root: float) -> None:
        self.shift = root**2
        self.value = test.gain.off_axis(root)
        with np.errstate(divide="ignore", invalid="ignore"):
            poles = 1.0 / (test.gain.poles**2 - self.shift)
        poles = np.where(np.isfinite(test.gain.poles), poles, 0.0)
        self.nodes = -1.0 / (test.nodes**2 + self.shift)
        self.factor = _factors(self.nodes, poles)

    def quality(self, level: float) -> float:
        """Return |F| at the shift beside the size of its two terms."""
        return abs(level**2 - self.value) / (level**2 + abs(self.value))

    def zeros(self, level: float, values: FloatArray) -> ComplexArray:
        """Return the zeros of F, lambda plane; infinite where F is no smaller at the shift."""
        terms = self.factor * (level**2 - values) / (level**2 - self.value)
        root = np.sqrt(np.abs(terms))
        matrix = np.diag(self.nodes) - np.outer(root, np.sign(terms) * root)
        found = np.linalg.eigvals(matrix).astype(complex)
        found[found == 0.0] = np.finfo(float).tiny
        return np.asarray(self.shift + 1.0 / found, dtype=complex)


def _nodes(poles: ComplexArray, low: float, high: float) -> FloatArray:
    """Place one node below every pole: at its modulus, a pair one damping ratio to either side.

    So nodes lie as dense as the function varies, and the factors stay near 1.
    """
    size = np.abs(poles)
    usual = np.isfinite(size) & (size > 0.0)
    safe = np.where(usual, poles, 1.0)
    damping = np.abs(safe.real) / np.abs(safe)
    place = np.log(np.abs(safe)) + np.sign(safe.imag) * damping
    place = np.where(size == 0.0, np.log(low / 10.0), place)
    place = np.sort(np.where(np.isinf(size), np.log(10.0 * high), place))
    for k in range(1, place.size):
        place[k] = max(place[k], place[k - 1] + NODE_GAP)
    return np.asarray(np.exp(place), dtype=float)


def _factors(nodes: FloatArray, poles: ComplexArray) -> FloatArray:
    """Return prod_k (z_j - zeta_k) / prod_{i != j} (z_j - z_i), paired so that products stay small.

    Poles are matched to nodes by order of modulus: each ratio is near 1 away from its own node.
    """
    order = np.argsort(np.abs(poles))[::-1]
    above = nodes[:, None] - poles[order][None, :]
    below = nodes[:, None] - nodes[np.argsort(np.abs(nodes))[::-1]][None, :]
    own = below == 0.0
    product = np.prod(above / np.where(own, 1.0, below), axis=1)
    return np.asarray(product.real, dtype=float)
