"""Frequency responses from the file alone, with numpy only.

State space is balanced first (B. N. Parlett and C. Reinsch, "Balancing a matrix for calculation of
eigenvalues and eigenvectors", Numer. Math. 13, 1969): states in rad/s of lightly damped modes span
ten decades otherwise.
"""

from collections.abc import Sequence

import numpy as np

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import (
    Block,
    ComplexArray,
    FittedPlant,
    FloatArray,
    Matrices,
    PlantSetFields,
)

TWO_PI = 2.0 * np.pi
_CHUNK_ELEMENTS = 2_000_000


def evaluation_points(frequency: FloatArray, period: float = 0.0) -> ComplexArray:
    """Return s = j omega, or z = e^{j omega period} where sampled; `frequency` in Hz."""
    s = 1j * TWO_PI * np.asarray(frequency, dtype=float)
    return np.exp(s * period) if period > 0.0 else s


def balance(matrices: Matrices) -> Matrices:
    """Scale the states by powers of two so that rows and columns of A are of equal size."""
    drift = matrices.A.copy()
    scale = np.ones(drift.shape[0])
    for _ in range(40):
        off = np.abs(drift) - np.diag(np.abs(np.diag(drift)))
        rows, columns = off.sum(axis=1), off.sum(axis=0)
        usable = (rows > 0.0) & (columns > 0.0)
        ratio = np.where(usable, rows, 1.0) / np.where(usable, columns, 1.0)
        step = np.exp2(np.round(np.log2(ratio) / 4.0))
        if np.all(step == 1.0):
            break
        drift = drift / step[:, None] * step
        scale = scale * step
    return Matrices(drift, matrices.B / scale[:, None], matrices.C * scale, matrices.D)


def state_space_response(matrices: Matrices, points: ComplexArray) -> ComplexArray:
    """Return C (sI - A)^-1 B + D at complex points s.

    Returns
    -------
    ComplexArray
        (outputs, inputs, points).
    """
    even = balance(matrices)
    states, inputs = even.B.shape
    result = np.empty((even.D.shape[0], inputs, points.size), dtype=complex)
    chunk = max(1, _CHUNK_ELEMENTS // max(1, states * states))
    for start in range(0, points.size, chunk):
        some = points[start : start + chunk]
        pencil = some[:, None, None] * np.eye(states) - even.A
        driven = np.broadcast_to(even.B, (some.size, states, inputs))
        inner = even.C @ np.linalg.solve(pencil, driven) + even.D
        result[:, :, start : start + chunk] = np.moveaxis(inner, 0, -1)
    return result


def set_points(contents: PlantSetFields, frequency: FloatArray) -> ComplexArray:
    """Return the points s or z at which this set is evaluated."""
    return evaluation_points(frequency, contents.time.period)


def delay_factor(frequency: FloatArray, delay: float) -> ComplexArray:
    """Return e^{-j omega delay}."""
    return np.exp(-1j * TWO_PI * np.asarray(frequency, dtype=float) * delay)


def nominal_response(contents: PlantSetFields, frequency: FloatArray) -> ComplexArray:
    """Return the nominal's (outputs, inputs, points) response, its delay included."""
    nominal = contents.nominal
    rational = state_space_response(nominal, set_points(contents, frequency))
    return rational * delay_factor(frequency, nominal.delay)


def member_response(
    contents: PlantSetFields, frequency: FloatArray, delta: Sequence[Matrices]
) -> ComplexArray:
    """Return the response of the member made by one system per block: an upper LFT.

    Raises
    ------
    InputError
        If the number of blocks or the size of one does not fit.
    """
    check_blocks(contents.interconnection.blocks, delta)
    points = set_points(contents, frequency)
    blocks = [state_space_response(block, points) for block in delta]
    around = state_space_response(contents.interconnection, points)
    response = upper_lft(np.moveaxis(around, -1, 0), np.moveaxis(block_diagonal(blocks), -1, 0))
    return np.moveaxis(response, 0, -1) * delay_factor(frequency, contents.nominal.delay)


def check_blocks(blocks: Sequence[Block], delta: Sequence[Matrices]) -> None:
    """Refuse a Delta whose blocks do not fit."""
    if len(blocks) != len(delta):
        raise InputError(Problem("delta", f"{len(delta)} blocks", f"{len(blocks)} blocks"))
    for index, (block, system) in enumerate(zip(blocks, delta, strict=True)):
        if system.D.shape != (block.rows, block.columns):
            expected = f"{block.rows} rows and {block.columns} columns"
            raise InputError(Problem(f"delta[{index}]", f"shape {system.D.shape}", expected))


def block_diagonal(blocks: Sequence[ComplexArray]) -> ComplexArray:
    """Put (rows, columns, points) blocks on the diagonal."""
    rows = sum(block.shape[0] for block in blocks)
    columns = sum(block.shape[1] for block in blocks)
    points = blocks[0].shape[2] if blocks else 1
    whole = np.zeros((rows, columns, points), dtype=complex)
    row = column = 0
    for block in blocks:
        whole[row : row + block.shape[0], column : column + block.shape[1]] = block
        row, column = row + block.shape[0], column + block.shape[1]
    return whole


def upper_lft(around: ComplexArray, delta: ComplexArray) -> ComplexArray:
    """Return M22 + M21 Delta (I - M11 Delta)^-1 M12, leading axes batched.

    Source: K. Zhou, J. C. Doyle and K. Glover, *Robust and Optimal Control*, 1996, chapter 10.
    """
    rows, columns = delta.shape[-2:]
    to_delta, out = around[..., :columns, :], around[..., columns:, :]
    loop = np.eye(columns) - to_delta[..., :rows] @ delta
    closed = np.linalg.solve(loop, to_delta[..., rows:])
    return np.asarray(out[..., rows:] + out[..., :rows] @ delta @ closed)


def plant_response(plant: FittedPlant, frequency: FloatArray) -> ComplexArray:
    r"""Return the (outputs, inputs, points) response of a fitted plant in continuous time.

    .. math:: e^{-j\omega\tau} [ b + \sum_k (r_k + j\omega q_k)
       / (\omega_k^2 - \omega^2 + 2j\zeta_k\omega_k\omega) + d ]
    """
    omega = TWO_PI * np.asarray(frequency, dtype=float)
    s = 1j * omega
    total = np.repeat(plant.feedthrough[:, :, None].astype(complex), omega.size, axis=2)
    if plant.base == "free":
        total += plant.base_gain[:, :, None] / s**2
    if plant.base == "pivot":
        natural = TWO_PI * plant.base_frequency
        bottom = natural**2 + s * (2.0 * plant.base_damping_ratio * natural) + s**2
        total += plant.base_residue[:, :, None] / bottom
    for k, hertz in enumerate(plant.modal_frequency):
        natural = TWO_PI * hertz
        bottom = natural**2 + s * (2.0 * plant.damping_ratio[k] * natural) + s**2
        top = plant.residue[k][:, :, None] + s * plant.residue_rate[k][:, :, None]
        total += top / bottom
    return total * delay_factor(frequency, plant.delay)
