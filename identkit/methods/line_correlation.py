"""Correlation of the errors of neighbouring lines of averaged spectra, and what it does to a fit.

A window spreads every line over its neighbours, so the errors of a response estimated from windowed
segments are correlated: for random excitation the correlation of lines m apart is
sum_j (1 - |j|/K) |c_mj|^2 over the same sum at m = 0, with c_mj the Fourier transform at m of the
product of the window and itself j hops later (covariance of spectral estimates: G. M. Jenkins and
D. G. Watts, Spectral Analysis and its Applications, Holden-Day 1968, chapter 6; overlapped
segments: P. D. Welch 1967). A least-squares fit that takes the lines for independent understates
its covariance; the covariance that does not is the sandwich of P. J. Huber (1967) with the known
correlation in the middle.
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

_NEGLIGIBLE = 1e-6


def line_correlation(samples: FloatArray, hop: int, segments: int) -> FloatArray:
    """Return the correlation of response errors at line distance 0, 1, 2 ...

    Parameters
    ----------
    samples
        The window, one weight per sample.
    hop
        Samples from the start of one segment to the start of the next.
    segments
        Number of segments averaged.

    Returns
    -------
    FloatArray
        Starts with 1 and ends where the correlation falls below 1e-6 of it.

    Notes
    -----
    For random excitation and noise whose spectra change little over the width of the window.
    """
    length = samples.size
    reach = min(segments, -(-length // hop))
    summed = np.zeros(length // 2 + 1)
    for j in range(reach):
        product = np.zeros(length)
        product[: length - j * hop] = samples[j * hop :] * samples[: length - j * hop]
        weight = 1.0 if j == 0 else 2.0 * (1.0 - j / segments)
        summed += weight * np.abs(np.fft.rfft(product)) ** 2
    correlation = summed / summed[0]
    significant = np.flatnonzero(correlation > _NEGLIGIBLE)
    return np.asarray(correlation[: significant[-1] + 1])


def pooled_inflation(correlation: FloatArray) -> float:
    """Return how much larger the variance of a mean over many lines is than of independent ones."""
    return float(correlation[0] + 2.0 * np.sum(correlation[1:]))


def inflated_covariance(jacobian: ComplexArray, correlation: FloatArray) -> FloatArray:
    """Return the parameter covariance of a least-squares fit to correlated lines.

    Parameters
    ----------
    jacobian
        (lines, parameters) derivative of the response by real parameters, each line divided by
        its standard error sqrt(E|error|^2); lines evenly spaced and in order.
    correlation
        Of the errors, by line distance, starting with 1.

    Returns
    -------
    FloatArray
        (parameters, parameters); with independent lines the usual (1/2) (Re J^H J)^-1.

    Notes
    -----
    The correlation is that of errors divided by the response of the instrument, which must turn
    little from one line to the next.
    """
    stacked = np.vstack([jacobian.real, jacobian.imag])
    scale = np.linalg.norm(stacked, axis=0)
    basis, triangle = np.linalg.qr(stacked / scale)
    inverse = np.linalg.solve(triangle, np.eye(scale.size))
    turned = basis[: jacobian.shape[0]] + 1j * basis[jacobian.shape[0] :]
    middle = _spread_over_neighbours(turned, correlation)
    half = inverse @ (0.5 * middle) @ inverse.T
    return np.asarray(half / np.outer(scale, scale))


def _spread_over_neighbours(basis: ComplexArray, correlation: FloatArray) -> FloatArray:
    total = np.real(basis.conj().T @ basis)
    for lag, value in enumerate(correlation[1:], start=1):
        if lag < basis.shape[0]:
            cross = np.real(basis[lag:].conj().T @ basis[:-lag])
            total = total + value * (cross + cross.T)
    return np.asarray(total)
