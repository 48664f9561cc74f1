"""Frequency response by instrumental variables from averaged spectra (Wellstead 1981).

With spectra of instruments z, plant inputs u and outputs y, the response is
S_yz S_zz^-1 S_zu (S_uz S_zz^-1 S_zu)^-1: least squares of y on the part of u that z explains. It is
consistent whenever what y does not owe to u is uncorrelated with z (P. E. Wellstead,
Non-parametric methods of system identification, Automatica 17(1), 1981; the covariance is that of
two-stage least squares, H. Theil 1953). The instrument decides the method: u itself for noise on
the output, y for noise on the input, an outer excitation for a closed loop.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray
from identkit.methods.averaged_spectra import AveragedSpectra

WEAK_INSTRUMENT = 10.0
"""Least ratio of explained to unexplained input times averages (Staiger & Stock 1997)."""


@dataclass(frozen=True)
class EstimatedResponse:
    """A frequency response with what is known of its errors.

    Attributes
    ----------
    frequency
        (lines,) Hz.
    response
        (lines, outputs, inputs).
    variance
        (lines, outputs, inputs) E|error|^2, total of both parts. Errors are circular: both parts
        have the same variance and no correlation, but at 0 and at half the sampling rate.
    coherence
        (lines, outputs) share of the output's power that the instruments explain.
    averages
        Independent averages behind it.
    correlation
        Of the errors of neighbouring lines, by line distance, starting with 1.
    strength
        (lines,) share of the inputs' power that the instruments explain; of the worst input.
    """

    frequency: FloatArray
    response: ComplexArray
    variance: FloatArray
    coherence: FloatArray
    averages: float
    correlation: FloatArray
    strength: FloatArray

    @property
    def weak(self) -> BoolArray:
        """Lines where the instruments explain too little of the input for the variance to hold."""
        unexplained = WEAK_INSTRUMENT * (1.0 - self.strength)
        return np.asarray(~(self.averages * self.strength > unexplained))


def instrumental_response(
    spectra: AveragedSpectra, instruments: list[int], inputs: list[int], outputs: list[int]
) -> EstimatedResponse:
    """Return the response of `outputs` to `inputs` by means of `instruments`.

    Parameters
    ----------
    spectra
        Averaged spectra of all channels.
    instruments, inputs, outputs
        Places of the channels; at least as many instruments as inputs.

    Raises
    ------
    ValueError
        If there are fewer instruments than inputs, or no more averages than inputs.

    Notes
    -----
    The variance has as many degrees of freedom as averages less inputs. It does not hold where
    `weak` is true.
    """
    if len(instruments) < len(inputs) or spectra.averages <= len(inputs):
        found = f"{len(instruments)} instruments, {spectra.averages:.3g} averages"
        raise ValueError(f"found {found}; expected at least {len(inputs)} and more than that")
    density = _scaled(spectra.density)
    szz, szu, szy = (_block(density[0], instruments, to) for to in (instruments, inputs, outputs))
    suu, suy, syy = (
        _block(density[0], inputs, inputs),
        _block(density[0], inputs, outputs),
        _block(density[0], outputs, outputs),
    )
    solved_u, solved_y = _solve(szz, szu), _solve(szz, szy)
    explained = _adjoint(szu) @ solved_u
    turned = _solve(explained, _adjoint(szu) @ solved_y)
    response = _adjoint(turned)
    residual = _real_diagonal(
        syy - response @ suy - _adjoint(response @ suy) + response @ suu @ turned
    )
    freedom = spectra.averages - len(inputs)
    share = _real_diagonal(_solve(explained, np.broadcast_to(np.eye(len(inputs)), suu.shape)))
    variance = np.maximum(residual, 0.0)[:, :, None] * share[:, None, :] / freedom
    ratio = density[1][:, outputs, None] / density[1][:, None, inputs]
    return EstimatedResponse(
        spectra.frequency,
        response * ratio,
        variance * ratio**2,
        np.clip(_real_diagonal(_adjoint(szy) @ solved_y), 0.0, 1.0),
        spectra.averages,
        spectra.correlation,
        np.clip(_real_diagonal(explained).min(axis=1), 0.0, 1.0),
    )


def _scaled(density: ComplexArray) -> tuple[ComplexArray, FloatArray]:
    """Return spectra of channels brought to unit power line by line, and their amplitudes."""
    amplitude = np.sqrt(np.maximum(_real_diagonal(density), np.finfo(float).tiny))
    return density / (amplitude[:, :, None] * amplitude[:, None, :]), amplitude


def _block(density: ComplexArray, first: list[int], second: list[int]) -> ComplexArray:
    return np.asarray(density[:, first][:, :, second])


def _adjoint(matrix: ComplexArray) -> ComplexArray:
    return np.asarray(np.swapaxes(matrix, 1, 2).conj())


def _solve(matrix: ComplexArray, right: ComplexArray) -> ComplexArray:
    """Solve line by line; a line that cannot be solved becomes NaN."""
    if matrix.shape[1] == 1:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(right / matrix)
    try:
        return np.asarray(np.linalg.solve(matrix, right))
    except np.linalg.LinAlgError:
        poor = ~(np.linalg.cond(matrix) < 1e12)
        whole = np.where(poor[:, None, None], np.eye(matrix.shape[1]), matrix)
        return np.where(poor[:, None, None], np.nan, np.linalg.solve(whole, right))


def _real_diagonal(matrix: ComplexArray) -> FloatArray:
    return np.asarray(np.einsum("kii->ki", matrix).real, dtype=float)
