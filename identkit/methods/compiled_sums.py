"""Weighted second-order sections and their derivatives as rows of real numbers.

Each complex row of F points is stored as 2F reals: real parts, then imaginary parts, so that a
Gram matrix is one symmetric rank-k product. Compiled by numba where it is installed; the numpy
twins give the same numbers to rounding.

Section k at the (normalised) frequency x: D = stiffness - x^2 + j x rate.
"""

from contextlib import suppress
from importlib import import_module
from typing import Any

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray, IntArray

njit: Any = None
with suppress(ImportError):
    njit = import_module("numba").njit


def section_rows_numpy(
    x: FloatArray, weight: FloatArray, stiffness: FloatArray, rate: FloatArray, out: FloatArray
) -> None:
    """Write w/D_k into row k of `out` (sections, 2F)."""
    points = x.size
    rows = weight / (stiffness[:, None] - x * x + 1j * rate[:, None] * x)
    out[:, :points] = rows.real
    out[:, points:] = rows.imag


def derivative_rows_numpy(
    x: FloatArray,
    weight: FloatArray,
    stiffness: FloatArray,
    rate: FloatArray,
    residue: FloatArray,
    residue_rate: FloatArray,
    out: FloatArray,
) -> None:
    """Write the derivatives of w (r + jxq)/D by log frequency (row 2k) and log damping (2k+1)."""
    points = x.size
    damping = 1j * rate[:, None] * x
    inverse = 1.0 / (stiffness[:, None] - x * x + damping)
    common = weight * (residue[:, None] + 1j * residue_rate[:, None] * x) * inverse * inverse
    by_damping = -damping * common
    by_frequency = by_damping - 2.0 * stiffness[:, None] * common
    out[0::2, :points], out[0::2, points:] = by_frequency.real, by_frequency.imag
    out[1::2, :points], out[1::2, points:] = by_damping.real, by_damping.imag


def window_gains_numpy(
    x: FloatArray,
    weight: FloatArray,
    residual: FloatArray,
    stiffness: FloatArray,
    rate: FloatArray,
    low: IntArray,
    high: IntArray,
    with_rate: bool,
    out: FloatArray,
) -> None:
    """Write (a.e)^2 / a.a of each candidate column a = w/D over its window of points.

    With `with_rate` the same of j x a is added.
    """
    points = x.size
    for k in range(stiffness.size):
        part = slice(low[k], high[k])
        here = x[part]
        column = weight[part] / (stiffness[k] - here * here + 1j * rate[k] * here)
        error = residual[part] + 1j * residual[points:][part]
        energy = (np.abs(column) ** 2).sum()
        out[k] = (column.conj() * error).sum().real ** 2 / energy
        if with_rate:
            slope = 1j * here * column
            out[k] += (slope.conj() * error).sum().real ** 2 / (np.abs(slope) ** 2).sum()


def _window_gains(
    x: FloatArray,
    weight: FloatArray,
    residual: FloatArray,
    stiffness: FloatArray,
    rate: FloatArray,
    low: IntArray,
    high: IntArray,
    with_rate: bool,
    out: FloatArray,
) -> None:
    points = x.size
    for k in range(stiffness.size):
        a, b = stiffness[k], rate[k]
        match = slope_match = energy = slope_energy = 0.0
        for i in range(low[k], high[k]):
            real = a - x[i] * x[i]
            imag = b * x[i]
            scale = weight[i] / (real * real + imag * imag)
            square = scale * weight[i]
            match += scale * (real * residual[i] - imag * residual[points + i])
            slope_match += x[i] * scale * (imag * residual[i] + real * residual[points + i])
            energy += square
            slope_energy += x[i] * x[i] * square
        out[k] = match * match / energy
        if with_rate:
            out[k] += slope_match * slope_match / slope_energy


def relocation_rows_numpy(
    x: FloatArray,
    weight: FloatArray,
    target: ComplexArray,
    stiffness: FloatArray,
    rate: FloatArray,
    out: FloatArray,
) -> None:
    """Write w/D_k, w jx/D_k, -target/D_k, -target jx/D_k as four blocks of rows."""
    points, count = x.size, stiffness.size
    inverse = 1.0 / (stiffness[:, None] - x * x + 1j * rate[:, None] * x)
    for block, factor in enumerate((weight + 0j, 1j * x * weight, -target, -1j * x * target)):
        rows = factor * inverse
        out[block * count : (block + 1) * count, :points] = rows.real
        out[block * count : (block + 1) * count, points:] = rows.imag


def _relocation_rows(
    x: FloatArray,
    weight: FloatArray,
    target: ComplexArray,
    stiffness: FloatArray,
    rate: FloatArray,
    out: FloatArray,
) -> None:
    points, count = x.size, stiffness.size
    for k in range(count):
        a, b = stiffness[k], rate[k]
        for i in range(points):
            real = a - x[i] * x[i]
            imag = b * x[i]
            scale = 1.0 / (real * real + imag * imag)
            real, imag = real * scale, -imag * scale
            out[k, i] = weight[i] * real
            out[k, points + i] = weight[i] * imag
            out[count + k, i] = -x[i] * weight[i] * imag
            out[count + k, points + i] = x[i] * weight[i] * real
            turned_real = imag * target[i].imag - real * target[i].real
            turned_imag = -real * target[i].imag - imag * target[i].real
            out[2 * count + k, i] = turned_real
            out[2 * count + k, points + i] = turned_imag
            out[3 * count + k, i] = -x[i] * turned_imag
            out[3 * count + k, points + i] = x[i] * turned_real


def _section_rows(
    x: FloatArray, weight: FloatArray, stiffness: FloatArray, rate: FloatArray, out: FloatArray
) -> None:
    points = x.size
    for k in range(stiffness.size):
        a, b = stiffness[k], rate[k]
        for i in range(points):
            real = a - x[i] * x[i]
            imag = b * x[i]
            scale = weight[i] / (real * real + imag * imag)
            out[k, i] = real * scale
            out[k, points + i] = -imag * scale


def _derivative_rows(
    x: FloatArray,
    weight: FloatArray,
    stiffness: FloatArray,
    rate: FloatArray,
    residue: FloatArray,
    residue_rate: FloatArray,
    out: FloatArray,
) -> None:
    points = x.size
    for k in range(stiffness.size):
        a, b, r, q = stiffness[k], rate[k], residue[k], residue_rate[k]
        for i in range(points):
            real = a - x[i] * x[i]
            imag = b * x[i]
            scale = 1.0 / (real * real + imag * imag)
            scale = weight[i] * scale * scale
            square_real = (real * real - imag * imag) * scale
            square_imag = -2.0 * real * imag * scale
            slope = q * x[i]
            common_real = r * square_real - slope * square_imag
            common_imag = r * square_imag + slope * square_real
            damping_real = imag * common_imag
            damping_imag = -imag * common_real
            out[2 * k, i] = damping_real - 2.0 * a * common_real
            out[2 * k, points + i] = damping_imag - 2.0 * a * common_imag
            out[2 * k + 1, i] = damping_real
            out[2 * k + 1, points + i] = damping_imag


if njit is None:  # pragma: no cover - exercised where numba is absent
    section_rows = section_rows_numpy
    derivative_rows = derivative_rows_numpy
    window_gains = window_gains_numpy
    relocation_rows = relocation_rows_numpy
else:
    section_rows = njit(cache=True, error_model="numpy")(_section_rows)
    derivative_rows = njit(cache=True, error_model="numpy")(_derivative_rows)
    window_gains = njit(cache=True, error_model="numpy")(_window_gains)
    relocation_rows = njit(cache=True, error_model="numpy")(_relocation_rows)
