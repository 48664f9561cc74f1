"""The modal least-squares problem in dimensionless form, with linear parameters projected out.

Residues, base gain and feedthrough enter linearly: for given poles and delay they follow from one
small linear problem, and the search runs over poles and delay alone. The Jacobian is Kaufman's:
the derivatives with the linear part projected out.

The delay turns the data, not the model (a rotation, so distances stay): the columns depend on the
poles only.

Sources: G. H. Golub & V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least
squares problems whose variables separate", SIAM J. Numer. Anal. 10 (1973) 413-432; L. Kaufman,
BIT 15 (1975) 49-57.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.compiled_sums import derivative_rows, section_rows

RIDGE = 1e-13


@dataclass(frozen=True)
class ModelShape:
    """Which terms the model has; the pivot counts as a section, before the modes."""

    base: str
    modes: int
    general: bool = False
    feedthrough: bool = True
    delay: bool = True

    @property
    def sections(self) -> int:
        """Number of second-order sections, the pivot included."""
        return self.modes + (self.base == "pivot")

    @property
    def parameters(self) -> int:
        """Number of free real parameters."""
        rates = self.modes if self.general else 0
        return self.delay + self.feedthrough + (self.base == "free") + 3 * self.sections + rates


@dataclass(frozen=True)
class ScaledData:
    """One response, dimensionless and weighted so that each real part has unit variance.

    Attributes
    ----------
    x
        (F,) frequency over `reference`, at most 1.
    weight
        (F,) square root of 2 / variance.
    target
        (F,) weight times response.
    reference
        rad/s of x = 1.
    """

    x: FloatArray
    weight: FloatArray
    target: ComplexArray
    reference: float

    def rotated(self, delay: float) -> FloatArray:
        """Return the data with the delay (in units of 1/reference) undone, as 2F reals."""
        return as_reals(self.target * np.exp(1j * delay * self.x) if delay else self.target)


@dataclass(frozen=True)
class Poles:
    """Point of the search: delay, log frequency and log damping ratio of each section."""

    delay: float
    log_frequency: FloatArray
    log_damping: FloatArray

    @property
    def stiffness(self) -> FloatArray:
        """Squared natural frequencies."""
        return np.asarray(np.exp(2.0 * self.log_frequency), dtype=float)

    @property
    def rate(self) -> FloatArray:
        """Twice damping ratio times natural frequency."""
        return np.asarray(2.0 * np.exp(self.log_frequency + self.log_damping), dtype=float)


@dataclass(frozen=True)
class Linearised:
    """The problem at one point: linear columns, their best coefficients, residual."""

    poles: Poles
    columns: FloatArray
    factor: FloatArray
    scale: FloatArray
    coefficients: FloatArray
    model: FloatArray
    residual: FloatArray


def as_reals(values: ComplexArray) -> FloatArray:
    """Stack real and imaginary parts along the last axis."""
    return np.concatenate([values.real, values.imag], axis=-1)


def times_jx(rows: FloatArray, x: FloatArray) -> FloatArray:
    """Multiply stacked rows by j x."""
    points = x.size
    out = np.empty_like(rows)
    np.multiply(rows[..., points:], -x, out=out[..., :points])
    np.multiply(rows[..., :points], x, out=out[..., points:])
    return out


def fixed_columns(data: ScaledData, shape: ModelShape) -> FloatArray:
    """Return the rows of feedthrough and free base, which no pole changes."""
    rows = []
    zeros = np.zeros_like(data.x)
    if shape.feedthrough:
        rows.append(np.concatenate([data.weight, zeros]))
    if shape.base == "free":
        rows.append(np.concatenate([-data.weight / data.x**2, zeros]))
    return np.array(rows).reshape(len(rows), 2 * data.x.size)


class ModalProblem:
    """Evaluates cost and normal equations of one response for the search.

    Coordinates: delay (where fitted), then log frequency and log damping ratio of all sections.
    Linear coefficients: feedthrough, base gain (each where fitted), residues of all sections,
    residue rates of the modes (where general).
    """

    def __init__(self, data: ScaledData, shape: ModelShape, delay: float = 0.0) -> None:
        self.data = data
        self.shape = shape
        self.fixed_delay = delay
        self._fixed = fixed_columns(data, shape)

    def pack(self, poles: Poles) -> FloatArray:
        """Return the coordinates of a point."""
        delay = [poles.delay] if self.shape.delay else []
        pairs = np.column_stack([poles.log_frequency, poles.log_damping]).ravel()
        return np.concatenate([delay, pairs])

    def unpack(self, point: FloatArray) -> Poles:
        """Return the point of some coordinates."""
        first = int(self.shape.delay)
        delay = float(point[0]) if self.shape.delay else self.fixed_delay
        return Poles(delay, point[first::2].copy(), point[first + 1 :: 2].copy())

    def step_limit(self) -> FloatArray:
        """Return the largest sensible step per coordinate."""
        delay = [0.5] if self.shape.delay else []
        return np.concatenate([delay, np.tile([0.2, 1.0], self.shape.sections)])

    def columns(self, poles: Poles) -> FloatArray:
        """Return the (linear coefficients, 2F) weighted columns."""
        shape, fixed, sections = self.shape, len(self._fixed), self.shape.sections
        rates = shape.modes if shape.general else 0
        rows = np.empty((fixed + sections + rates, 2 * self.data.x.size))
        rows[:fixed] = self._fixed
        section_rows(
            self.data.x,
            self.data.weight,
            poles.stiffness,
            poles.rate,
            rows[fixed : fixed + sections],
        )
        if rates:
            modal = rows[fixed + sections - rates : fixed + sections]
            rows[fixed + sections :] = times_jx(modal, self.data.x)
        return rows

    def evaluate(self, point: FloatArray) -> tuple[float, Linearised]:
        """Return cost and state at a point; the cost is infinite where it may not go."""
        poles = self.unpack(point)
        state = self.linearise(poles)
        cost = float(state.residual @ state.residual)
        return (cost if self._allowed(poles) else np.inf), state

    def _allowed(self, poles: Poles) -> bool:
        return bool(
            np.all(np.abs(poles.log_frequency) < 25.0) and np.all(np.abs(poles.log_damping) < 16.0)
        )

    def linearise(self, poles: Poles) -> Linearised:
        """Solve for the linear coefficients, with one step of refinement."""
        rows = self.columns(poles)
        target = self.data.rotated(poles.delay)
        if len(rows) == 0:
            nothing = np.zeros((0, 0))
            return Linearised(poles, rows, nothing, np.zeros(0), np.zeros(0), 0.0 * target, target)
        factor, scale = scaled_factor(rows @ rows.T)
        coefficients = solve_scaled(factor, scale, rows @ target)
        residual = target - coefficients @ rows
        coefficients = coefficients + solve_scaled(factor, scale, rows @ residual)
        model = coefficients @ rows
        return Linearised(poles, rows, factor, scale, coefficients, model, target - model)

    def derivatives(self, state: Linearised) -> FloatArray:
        """Return the (coordinates, 2F) weighted derivatives at fixed linear coefficients."""
        shape, sections = self.shape, self.shape.sections
        first, fixed = int(shape.delay), len(self._fixed)
        rows = np.empty((first + 2 * sections, 2 * self.data.x.size))
        if shape.delay:
            rows[0] = -times_jx(state.model, self.data.x)
        residue = state.coefficients[fixed : fixed + sections]
        residue_rate = np.zeros(sections)
        if shape.general:
            residue_rate[sections - shape.modes :] = state.coefficients[fixed + sections :]
        derivative_rows(
            self.data.x, self.data.weight, state.poles.stiffness, state.poles.rate,
            residue, residue_rate, rows[first:],
        )  # fmt: skip
        return rows

    def normal_equations(self, state: Linearised) -> tuple[FloatArray, FloatArray]:
        """Return Kaufman's normal equations of the reduced problem."""
        rows = self.derivatives(state)
        if len(state.columns) == 0:
            return rows @ rows.T, rows @ state.residual
        cross = (rows @ state.columns.T) * state.scale
        half, _ = lapack.dtrtrs(state.factor, cross.T, lower=1)
        return rows @ rows.T - half.T @ half, rows @ state.residual


def scaled_factor(gram: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the lower Cholesky factor of the Gram matrix scaled to a unit diagonal, and scale."""
    diagonal = np.diag(gram)
    scale = 1.0 / np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0))
    matrix = gram * scale[:, None] * scale
    ridge = RIDGE
    while True:
        matrix.flat[:: len(scale) + 1] = 1.0 + ridge
        factor, failed = lapack.dpotrf(matrix, lower=1)
        if failed == 0 and np.isfinite(factor[-1, -1]):
            return factor, scale
        if not np.isfinite(matrix).all() or ridge > 1.0:
            raise np.linalg.LinAlgError("normal equations are not finite")
        ridge *= 100.0


def solve_scaled(factor: FloatArray, scale: FloatArray, right: FloatArray) -> FloatArray:
    """Solve with a factor from `scaled_factor`; `right` is (n,)."""
    solution, _ = lapack.dpotrs(factor, right * scale, lower=1)
    return np.asarray(solution * scale, dtype=float)
