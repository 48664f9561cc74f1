"""Zero-order hold, delay and folding between a sampled response and the plant behind it.

The samples of a plant driven through a zero-order hold have the response
e^{-jw tau} sum_k H(f + k fs) P(f + k fs), H(f) = sinc(f T) e^{-j pi f T} (K. J. Astrom and
B. Wittenmark, Computer-Controlled Systems, Prentice Hall, chapters 2 and 7). Dividing by the term
k = 0 leaves the plant plus its images; how large they can be is bounded here from the response near
half the sampling rate and a stated roll-off above it. Where that bound is not small, only a model
that is itself sampled describes the data.
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

ROLL_OFF = 2
"""Power of frequency with which a positioning plant is taken to fall above half the rate."""


def hold_response(frequency: FloatArray, period: float, delay: float = 0.0) -> ComplexArray:
    """Return the response of a zero-order hold of `period` and a further `delay`, s."""
    phase = -np.pi * frequency * (period + 2.0 * delay)
    return np.asarray(np.sinc(frequency * period) * np.exp(1j * phase))


def folded_frequency(frequency: FloatArray, rate: float) -> FloatArray:
    """Return where a frequency appears once sampled at `rate`, Hz."""
    return np.asarray(np.abs(frequency - rate * np.round(np.asarray(frequency) / rate)))


def image_bound(
    frequency: FloatArray,
    response: ComplexArray,
    sample_period: float,
    hold_period: float | None = None,
    roll_off: int = ROLL_OFF,
) -> FloatArray:
    """Bound what the images add to a response whose hold has been divided out.

    Parameters
    ----------
    frequency
        (lines,) Hz, below half the sampling rate.
    response
        (lines,) hold divided out.
    sample_period
        Of the output, s.
    hold_period
        Of the drive, s; the sample period by default.
    roll_off
        The plant is taken to stay below its largest value over the last third of an octave, falling
        with this power of frequency from half the rate on. A resonance above half the rate that
        stands higher breaks the bound.

    Returns
    -------
    FloatArray
        (lines,) largest absolute error in the units of the response.
    """
    rate = 1.0 / sample_period
    hold = sample_period if hold_period is None else hold_period
    last = frequency >= 2.0 ** (-1.0 / 3.0) * frequency[-1]
    ceiling = np.max(np.abs(response[last])) * (frequency[-1] * sample_period * 2.0) ** roll_off
    own = np.abs(np.sinc(frequency * hold))
    total = np.zeros(frequency.size)
    for k in range(1, 6):
        for image in (k * rate - frequency, k * rate + frequency):
            fall = (0.5 * rate / image) ** roll_off
            total += np.abs(np.sinc(image * hold)) * fall
    return np.asarray(ceiling * total / own)
