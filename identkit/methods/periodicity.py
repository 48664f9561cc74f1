"""Period of an excitation from its autocorrelation, and when a bench has settled.

The autocorrelation of a periodic signal returns to its value at rest after one period (J. S. Bendat
and A. G. Piersol, Random Data, Wiley, chapter 5). A generator repeats its samples exactly, so the
period found is confirmed sample by sample.
"""

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft

from identkit.methods.arrays import ComplexArray, FloatArray

_SAME = 1e-6


def excitation_period(signal: FloatArray, *, fewest: int = 3, tolerance: float = _SAME) -> int:
    """Return the samples after which a signal repeats itself; 0 if it does not.

    Parameters
    ----------
    signal
        Samples of the excitation as it was generated.
    fewest
        Periods the signal must hold.
    tolerance
        Largest root-mean-square difference of two periods, relative to the signal's.
    """
    moving = signal - signal.mean()
    power = float(np.mean(moving**2))
    longest = signal.size // fewest
    if power <= 0.0 or longest < 4:
        return 0
    correlation = _autocorrelation(moving)[: longest + 1]
    ratio = correlation / (power * (signal.size - np.arange(longest + 1)))
    peaks = np.flatnonzero((ratio[1:-1] >= ratio[:-2]) & (ratio[1:-1] >= ratio[2:])) + 1
    candidates = np.append(peaks, longest)
    likely = candidates[(candidates >= 4) & (ratio[candidates] > 0.9)]
    for period in likely:
        difference = signal[period:] - signal[:-period]
        if np.mean(difference**2) <= 2.0 * tolerance**2 * power:
            return int(period)
    return 0


def _autocorrelation(moving: FloatArray) -> FloatArray:
    length = next_fast_len(2 * moving.size, real=True)
    return np.asarray(irfft(np.abs(rfft(moving, length)) ** 2, length))


def settled_period(lines: ComplexArray) -> int:
    """Return the first period from which on the lines no longer drift.

    Parameters
    ----------
    lines
        (channels, periods, lines) spectra of successive periods.

    Returns
    -------
    int
        At most half the periods. A period counts as settled when its distance from the mean of the
        last half, over all lines, is no more than chance (four standard deviations) makes it.
    """
    periods = lines.shape[1]
    half = periods // 2
    last = lines[:, half:]
    each = last.var(axis=1, ddof=1)
    noise = each.mean(axis=-1)
    # lines with more noise weigh more: what the sum is worth in equal lines
    worth = noise**2 * lines.shape[-1] / np.maximum(np.mean(each**2, axis=-1), np.finfo(float).tiny)
    distance = np.mean(np.abs(lines - last.mean(axis=1, keepdims=True)) ** 2, axis=-1)
    expected = noise[:, None] * (1.0 + 1.0 / last.shape[1])
    spread = 4.0 / np.sqrt(np.maximum(worth, 1.0))
    limit = expected * (1.0 + spread[:, None]) + 1e-20 * np.mean(np.abs(lines) ** 2)
    late = np.flatnonzero((distance[:, :half] > limit).any(axis=0))
    return int(late[-1]) + 1 if late.size else 0
