"""Multisines with phases that keep their peaks low (Schroeder 1970).

M. R. Schroeder, Synthesis of low-peak-factor signals and binary sequences with low autocorrelation,
IEEE Trans. Information Theory 16(1), 1970: the phase of line k is -2 pi sum_{l<k} (k - l) p_l, with
p_l the share of power in line l; for equal lines -pi k (k - 1) / lines.
"""

import numpy as np

from identkit.methods.arrays import FloatArray


def schroeder_phases(power: FloatArray, lines: FloatArray | None = None) -> FloatArray:
    """Return the phases of lines from their powers (of any scale), rad.

    Parameters
    ----------
    power
        Of each line.
    lines
        Whole numbers that say where they stand; consecutive by default. Where lines are left out,
        each phase step is that of the gap, so that the group delay still sweeps one period.
    """
    share = np.cumsum(np.asarray(power, dtype=float) / np.sum(power))[:-1]
    gap = np.ones(share.size) if lines is None else np.diff(np.asarray(lines, dtype=float))
    return np.asarray(-2.0 * np.pi * np.concatenate([[0.0], np.cumsum(gap * share)]))


def multisine(
    lines: FloatArray, amplitude: FloatArray, samples: int, phase: FloatArray | None = None
) -> FloatArray:
    """Return one period of a sum of cosines with low peaks.

    Parameters
    ----------
    lines
        Whole numbers of periods per record, each above 0 and below samples / 2.
    amplitude
        Of each cosine.
    samples
        Samples per period.
    phase
        Of each cosine, rad; by default those that keep the peaks of this signal low. For low peaks
        at the output of a system take its own phases off those of the output wanted.

    Raises
    ------
    ValueError
        If a line is not between 0 and half the samples.
    """
    place = np.asarray(lines, dtype=int)
    if place.size == 0 or place.min() < 1 or 2 * place.max() >= samples:
        raise ValueError(f"found lines {lines} of {samples} samples; expected 1 to below half")
    spectrum = np.zeros(samples // 2 + 1, dtype=complex)
    amplitude = np.broadcast_to(amplitude, place.shape)
    turned = schroeder_phases(amplitude**2, place) if phase is None else phase
    spectrum[place] = amplitude * np.exp(1j * turned)
    return np.asarray(np.fft.irfft(spectrum, samples) * samples / 2.0)


def crest_factor(signal: FloatArray) -> float:
    """Return peak over root mean square."""
    return float(np.max(np.abs(signal)) / np.sqrt(np.mean(np.square(signal))))
