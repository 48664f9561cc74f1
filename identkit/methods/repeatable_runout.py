"""Spindle-synchronous (repeatable) runout, taken out by synchronous averaging.

What repeats with every turn is found by averaging turn on turn (P. D. McFadden, A revised model for
the extraction of periodic waveforms by time domain averaging, Mechanical Systems and Signal
Processing 1(1), 1987). Averaging M turns takes 1/M of everything else at its harmonics with it.
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray


class TurnAverager:
    """Average turns of several channels from chunks of any size.

    Parameters
    ----------
    channels
        Number of channels.
    samples
        Samples per turn.
    """

    def __init__(self, channels: int, samples: int) -> None:
        self._sum = np.zeros((channels, samples))
        self._count = np.zeros(samples)
        self._at = 0

    def add(self, chunk: FloatArray) -> None:
        """Take (channels, samples) that follow on those added before; NaN is left out."""
        turn = self._sum.shape[1]
        place = (self._at + np.arange(chunk.shape[1])) % turn
        good = np.isfinite(chunk).all(axis=0)
        for row, values in zip(self._sum, chunk, strict=True):
            row += np.bincount(place[good], values[good], turn)
        self._count += np.bincount(place[good], minlength=turn)
        self._at += chunk.shape[1]

    @property
    def turns(self) -> float:
        """Turns averaged, the fewest of any sector."""
        return float(self._count.min())

    def mean(self) -> FloatArray:
        """Return (channels, samples) of one turn, each channel without its mean."""
        mean = self._sum / np.maximum(self._count, 1.0)
        return np.asarray(mean - mean.mean(axis=1, keepdims=True))


def without_turn(chunk: FloatArray, turn: FloatArray, start: int) -> FloatArray:
    """Return a chunk that begins at sample `start` of a record, less the mean turn."""
    place = (start + np.arange(chunk.shape[1])) % turn.shape[1]
    return np.asarray(chunk - turn[:, place])


def harmonic_lines(frequency: FloatArray, turn_frequency: float, width: float) -> BoolArray:
    """Return which lines lie within `width` Hz of a harmonic of the turn frequency."""
    order = np.round(frequency / turn_frequency)
    return np.asarray((order >= 1) & (np.abs(frequency - order * turn_frequency) <= width))
