"""Starting poles by relaxed pole relocation, in second-order sections with real coefficients.

With trial poles p, the linear problem sigma(s) H(s) = N(s), both sides over the trial poles, is
solved; the zeros of sigma are better poles, and become the next trial poles. Data far from any
model order still give poles: the order is chosen too high on purpose and pruned afterwards.

Sources: B. Gustavsen & A. Semlyen, "Rational approximation of frequency domain responses by
vector fitting", IEEE Trans. Power Delivery 14 (1999) 1052-1061; B. Gustavsen, "Improving the pole
relocating properties of vector fitting", same journal 21 (2006) 1587-1592 (relaxation).
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.compiled_sums import relocation_rows, section_rows
from identkit.methods.modal_problem import ScaledData, as_reals, scaled_factor, solve_scaled

DAMPING_FLOOR = 1e-5
START_DAMPING = 0.01


def starting_sections(x: FloatArray, count: int) -> tuple[FloatArray, FloatArray]:
    """Return stiffness and rate of sections spread evenly over the points of the grid.

    Even in points, not in Hz: the grid is dense where its user expects resonances.
    """
    place = (np.arange(count) + 0.5) / count * (x.size - 1)
    natural = np.interp(place, np.arange(x.size), x)
    return natural**2, 2.0 * START_DAMPING * natural


def relocate_poles(
    data: ScaledData,
    delay: float,
    stiffness: FloatArray,
    rate: FloatArray,
    *,
    double_integrator: bool,
    iterations: int,
) -> tuple[FloatArray, FloatArray]:
    """Return stiffness and rate (sections,) after some relocations.

    Parameters
    ----------
    data
        Dimensionless weighted response.
    delay
        Delay to undo first, in units of 1/reference.
    stiffness, rate
        (sections,) trial sections s^2 + rate s + stiffness.
    double_integrator
        Whether the response also holds poles at the origin.
    iterations
        Number of relocations.
    """
    target = data.target * np.exp(1j * delay * data.x)
    for _ in range(iterations):
        stiffness, rate = _relocated(data, target, stiffness, rate, double_integrator)
    return stiffness, rate


def _relocated(
    data: ScaledData,
    target: ComplexArray,
    stiffness: FloatArray,
    rate: FloatArray,
    double_integrator: bool,
) -> tuple[FloatArray, FloatArray]:
    points, count = data.x.size, stiffness.size
    fixed = _fixed_rows(data, target, double_integrator)
    rows = np.empty((4 * count + len(fixed), 2 * points))
    relocation_rows(data.x, data.weight, target, stiffness, rate, rows)
    rows[4 * count :] = fixed
    gram = rows @ rows.T
    sigma = np.append(np.arange(2 * count, 4 * count), len(rows) - 1)
    mean = _mean_of_sigma(data.x, stiffness, rate)
    energy = float(np.sum(np.abs(target) ** 2))
    gram[np.ix_(sigma, sigma)] += np.outer(mean, mean) * (energy / points**2)
    factor, scale = scaled_factor(gram)
    right = np.zeros(len(gram))
    right[sigma] = mean
    return zeros_of_sigma(stiffness, rate, solve_scaled(factor, scale, right)[sigma])


def _fixed_rows(data: ScaledData, target: ComplexArray, double_integrator: bool) -> FloatArray:
    """Return the rows no pole changes: constant, poles at the origin, and sigma's constant last."""
    s = 1j * data.x
    background = [data.weight + 0j]
    if double_integrator:
        background += [data.weight / s, data.weight / s**2]
    return as_reals(np.array([*background, -target]))


def _mean_of_sigma(x: FloatArray, stiffness: FloatArray, rate: FloatArray) -> FloatArray:
    """Sum over the points of the real parts of sigma's columns.

    The relaxation: this mean is held near one, so that sigma cannot vanish.
    """
    ones = np.ones_like(x)
    rows = np.empty((stiffness.size, 2 * x.size))
    section_rows(x, ones, stiffness, rate, rows)
    plain = rows[:, : x.size].sum(axis=1)
    slope = -(rows[:, x.size :] @ x)
    return np.concatenate([plain, slope, [float(x.size)]])


def zeros_of_sigma(
    stiffness: FloatArray, rate: FloatArray, sigma: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the sections whose poles are the zeros of sigma, turned stable.

    Parameters
    ----------
    stiffness, rate
        (n,) sections of sigma's denominator.
    sigma
        (2n + 1,) coefficients of 1/D, then of s/D, then the constant.
    """
    count = stiffness.size
    constant = sigma[-1] if abs(sigma[-1]) > 1e-8 * np.max(np.abs(sigma)) else 1e-8
    natural = np.sqrt(stiffness)
    matrix = np.zeros((2 * count, 2 * count))
    even, odd = np.arange(0, 2 * count, 2), np.arange(1, 2 * count, 2)
    matrix[even, odd] = natural
    matrix[odd, even] = -natural
    matrix[odd, odd] = -rate
    gain = np.empty(2 * count)
    gain[even] = sigma[:count] / natural
    gain[odd] = sigma[count:-1]
    matrix[odd] -= gain / constant
    return _as_sections(np.linalg.eigvals(matrix).astype(complex))


def _as_sections(poles: ComplexArray) -> tuple[FloatArray, FloatArray]:
    """Pair conjugate poles, and real poles by size, into stable sections."""
    upper = poles[poles.imag > 0.0]
    real = np.sort(np.abs(poles[poles.imag == 0.0].real))
    stiffness = np.concatenate([np.abs(upper) ** 2, real[0::2] * real[1::2]])
    rate = np.concatenate([2.0 * np.abs(upper.real), real[0::2] + real[1::2]])
    stiffness = np.maximum(stiffness, 1e-12)
    order = np.argsort(stiffness)
    floor = 2.0 * DAMPING_FLOOR * np.sqrt(stiffness)
    return stiffness[order], np.maximum(rate, floor)[order]
