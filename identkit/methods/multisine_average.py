"""Frequency response from periodic excitation, with the sample covariance over periods.

R. Pintelon and J. Schoukens, System Identification: A Frequency Domain Approach, 2nd ed., Wiley
2012, chapters 2 and 4. Whole periods leave no leakage; what differs from period to period is noise,
measured without a model, so the estimate holds in open and in closed loop alike. For one experiment
the variance is |G|^2 (s_y^2/|Y|^2 + s_u^2/|U|^2 - 2 Re(s_yu/(Y conj U))) / periods.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.instrumental_response import EstimatedResponse

_EXCITED = 1e-12
_STANDS_OUT = 30.0
_FREEDOM_WANTED = 50
_WIDEST = 3


@dataclass(frozen=True)
class PeriodicLines:
    """Lines of whole periods of one experiment.

    Attributes
    ----------
    frequency
        (lines,) Hz.
    mean
        (channels, lines) mean over periods.
    covariance
        (lines, channels, channels) E[e_i conj(e_j)] of one period's lines.
    periods
        Number of periods.
    """

    frequency: FloatArray
    mean: ComplexArray
    covariance: ComplexArray
    periods: int


def periodic_lines(spectra: ComplexArray, frequency: FloatArray) -> PeriodicLines:
    """Return mean and sample covariance of (channels, periods, lines) spectra of one experiment.

    Raises
    ------
    ValueError
        If there are fewer than two periods: the noise cannot be told from the signal.
    """
    periods = spectra.shape[1]
    if periods < 2:
        raise ValueError(f"found {periods} period; expected at least 2 after settling")
    mean = spectra.mean(axis=1)
    scatter = spectra - mean[:, None]
    covariance = np.einsum("imk,jmk->kij", scatter, scatter.conj()) / (periods - 1)
    return PeriodicLines(frequency, mean, covariance, periods)


def excited_lines(spectra: ComplexArray) -> np.ndarray:
    """Return the places of the lines that an excitation of (periods, lines) spectra holds."""
    mean = spectra.mean(axis=0)
    power = np.abs(mean) ** 2
    noise = spectra.var(axis=0, ddof=1) / len(spectra)
    standing = (power > _EXCITED * power[1:].max()) & (power > _STANDS_OUT * noise)
    standing[0] = False
    return np.flatnonzero(standing)


def periodic_response(
    experiments: list[PeriodicLines], instruments: list[int], inputs: list[int], outputs: list[int]
) -> EstimatedResponse:
    """Return the response from one or several periodic experiments on the same lines.

    Parameters
    ----------
    experiments
        As many as inputs or more, with independent excitations where there are several inputs.
    instruments
        Places of the excitations, as many as inputs; the inputs themselves in open loop.
    inputs, outputs
        Places of the plant's inputs and outputs.

    Raises
    ------
    ValueError
        If there are fewer experiments than inputs, or another number of instruments.

    Notes
    -----
    The variance has sum(periods - 1) degrees of freedom, times the lines it is averaged over: where
    they are fewer than 50, up to three lines on either side, since noise that owes nothing to the
    input changes little from line to line. Errors are circular; those of different
    lines are uncorrelated. Noise that rings on from one period into the next makes the stated
    variance somewhat large, by about the ringing's share of a period. Distortion that repeats with
    the excitation is not seen in one experiment; with several it shows in their scatter.
    """
    if len(instruments) != len(inputs) or len(experiments) < len(inputs):
        found = f"{len(instruments)} instruments, {len(experiments)} experiments"
        raise ValueError(f"found {found}; expected {len(inputs)}, and at least as many")
    weight = np.array([each.periods for each in experiments], dtype=float)
    mean = np.stack([each.mean for each in experiments], axis=-1).transpose(1, 0, 2)
    z, u, y = mean[:, instruments], mean[:, inputs], mean[:, outputs]
    adjoint = np.swapaxes(z * weight, 1, 2).conj()
    mixing = adjoint @ np.linalg.inv(u @ adjoint)
    response = y @ mixing
    covariance, freedom = _pooled(experiments)
    noise = _smoothed(_equation_noise(covariance, response, inputs, outputs), freedom)
    share = np.einsum("keu,e->ku", np.abs(mixing) ** 2, 1.0 / weight)
    signal = np.einsum("kye,e->ky", np.abs(y) ** 2, weight) / weight.sum()
    outer = np.einsum("kii->ki", covariance[:, outputs][:, :, outputs]).real
    return EstimatedResponse(
        experiments[0].frequency,
        response,
        noise[:, :, None] * share[:, None, :],
        signal / (signal + outer),
        float(freedom + len(experiments)),
        np.ones(1),
        np.ones(len(response)),
    )


def _pooled(experiments: list[PeriodicLines]) -> tuple[ComplexArray, int]:
    freedom = [each.periods - 1 for each in experiments]
    total = sum(
        count * each.covariance for count, each in zip(freedom, experiments, strict=True)
    ) / sum(freedom)
    return np.asarray(total), sum(freedom)


def _smoothed(noise: FloatArray, freedom: int) -> FloatArray:
    """Average (lines, outputs) variances of few degrees of freedom over neighbouring lines."""
    half = min(_WIDEST, -(-(_FREEDOM_WANTED // freedom - 1) // 2), (len(noise) - 1) // 2)
    if half < 1:
        return noise
    width = 2 * half + 1
    padded = np.concatenate([noise[half:0:-1], noise, noise[-2 : -2 - half : -1]])
    summed = np.cumsum(np.concatenate([np.zeros((1, noise.shape[1])), padded]), axis=0)
    return np.asarray((summed[width:] - summed[:-width]) / width)


def _equation_noise(
    covariance: ComplexArray, response: ComplexArray, inputs: list[int], outputs: list[int]
) -> FloatArray:
    """Return (lines, outputs) variance per period of what the outputs do not owe to the inputs."""
    yy = np.einsum("kii->ki", covariance[:, outputs][:, :, outputs]).real
    uy = covariance[:, inputs][:, :, outputs]
    uu = covariance[:, inputs][:, :, inputs]
    cross = np.einsum("kij,kji->ki", response, uy).real
    both = np.einsum("kij,kjl,kil->ki", response, uu, response.conj()).real
    return np.asarray(np.maximum(yy - 2.0 * cross + both, 0.0))
