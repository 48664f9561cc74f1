"""Local polynomial estimate of a frequency response from one long record of any excitation.

R. Pintelon, J. Schoukens, G. Vandersteen and K. Barbe, Estimation of nonparametric noise and FRF
models for multivariable systems, Mechanical Systems and Signal Processing 24(3), 2010. Around each
line, response and transient are polynomials of the line number; least squares over the
neighbouring lines gives both, and what is left is the noise. The transient (leakage) is removed
with its model instead of being damped by a window.
"""

import numpy as np
from scipy.fft import rfft

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.instrumental_response import EstimatedResponse

DEGREE = 2
FEWEST_NEIGHBOURS = 4
_LINES_AT_ONCE = 128


def local_polynomial_response(
    record: FloatArray,
    sample_period: float,
    reference: int,
    plant_input: int,
    plant_output: int,
    *,
    neighbours: int = 6,
) -> EstimatedResponse:
    """Return the response of a scalar plant in open or closed loop.

    Parameters
    ----------
    record
        (channels, samples).
    sample_period
        s.
    reference
        Place of the excitation; the input itself in open loop.
    plant_input, plant_output
        Places of the plant's input and output.
    neighbours
        Lines on either side of each centre, 4 or more. Centres stand `neighbours` + 1 lines apart.

    Raises
    ------
    ValueError
        If there are too few neighbours or the record is too short for two centres.

    Notes
    -----
    The response must be close to a parabola over 2 `neighbours` + 1 lines; where it is not, the
    residual, and with it the stated variance, grows. The variance has 2 `neighbours` - 5 degrees
    of freedom.
    """
    width = 2 * neighbours + 1
    total = record.shape[1] // 2 + 1
    if neighbours < FEWEST_NEIGHBOURS or total < 2 * width:
        found = f"{neighbours} neighbours, {record.shape[1]} samples"
        raise ValueError(f"found {found}; expected at least 4, and two widths of lines")
    lines = rfft(record[[reference, plant_output, plant_input]], axis=1) / np.sqrt(record.shape[1])
    centres = np.arange(neighbours + 1, total - neighbours - 1, neighbours + 1)
    parts = [
        _fit_around(lines, centres[k : k + _LINES_AT_ONCE], neighbours)
        for k in range(0, centres.size, _LINES_AT_ONCE)
    ]
    gain, noise, share, overlap, strength = (
        np.concatenate([part[k] for part in parts]) for k in range(5)
    )
    response = gain[:, 0] / gain[:, 1]
    error = (
        noise[:, 0, 0].real
        + np.abs(response) ** 2 * noise[:, 1, 1].real
        - 2.0 * np.real(response.conj() * noise[:, 0, 1])
    )
    variance = np.maximum(error, 0.0) * share / np.abs(gain[:, 1]) ** 2
    signal = np.abs(gain[:, 0]) ** 2 * strength
    return EstimatedResponse(
        centres / (record.shape[1] * sample_period),
        response[:, None, None],
        variance[:, None, None],
        (signal / (signal + noise[:, 0, 0].real))[:, None],
        float(width - 2 * (DEGREE + 1) + 1),
        np.array([1.0, float(np.mean(overlap))]),
        np.asarray(_explained(gain, noise, strength)),
    )


def _explained(gain: ComplexArray, noise: ComplexArray, strength: FloatArray) -> FloatArray:
    power = np.abs(gain[:, 1]) ** 2 * strength
    return np.asarray(power / (power + noise[:, 1, 1].real))


def _fit_around(
    lines: ComplexArray, centres: np.ndarray, neighbours: int
) -> tuple[ComplexArray, ComplexArray, FloatArray, FloatArray, FloatArray]:
    """Return gains, noise covariance, variance share, overlap with the next centre, power."""
    steps = np.arange(-neighbours, neighbours + 1)
    around = lines[:, centres[:, None] + steps]
    powers = (steps / neighbours)[:, None] ** np.arange(DEGREE + 1)
    transient = np.broadcast_to(powers, (centres.size, *powers.shape))
    basis = np.concatenate([around[0][..., None] * powers, transient.astype(complex)], axis=-1)
    scale = np.linalg.norm(basis, axis=1, keepdims=True)
    scale[scale == 0.0] = 1.0
    q, r = np.linalg.qr(basis / scale)
    targets = np.moveaxis(around[1:], 0, -1)
    projected = np.swapaxes(q, 1, 2).conj() @ targets
    inverse = np.linalg.pinv(r)
    gain = (inverse[:, :1] @ projected)[:, 0] / scale[:, 0, :1]
    left = targets - q @ projected
    freedom = steps.size - 2 * (DEGREE + 1)
    noise = np.einsum("kli,klj->kij", left, left.conj()) / freedom
    # the estimate is a weighted sum of lines; the weights give its variance and what it shares
    weights = (inverse[:, :1] @ np.swapaxes(q, 1, 2).conj())[:, 0] / scale[:, 0, :1]
    share = np.sum(np.abs(weights) ** 2, axis=1)
    return gain, noise, share, _overlap(weights, share, neighbours), _power(around[0])


def _overlap(weights: ComplexArray, share: FloatArray, neighbours: int) -> FloatArray:
    """Return the correlation of the errors of successive centres from the lines they share."""
    step = neighbours + 1
    if len(weights) < 2:
        return np.zeros(0)
    shared = np.sum(weights[:-1, step:] * weights[1:, :-step].conj(), axis=1).real
    return np.asarray(shared / np.sqrt(share[:-1] * share[1:]))


def _power(reference: ComplexArray) -> FloatArray:
    return np.asarray(np.mean(np.abs(reference) ** 2, axis=1), dtype=float)
