"""Required radius along frequency, who sets it, and how a weight stands to it."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.curve_thinning import thinned
from identkit.methods.magnitude_weight import MagnitudeWeight

THINNING_DB = 0.01
WIDEST_GAP = 0.02


@dataclass(frozen=True)
class RadiusCurve:
    """Points of the bound.

    Attributes
    ----------
    frequency
        (points,) Hz, increasing.
    required
        (points,) radius to be held, the floor included.
    setter
        (points,) index of the plant that sets it; -1 where the floor does.
    """

    frequency: FloatArray
    required: FloatArray
    setter: IntArray

    def with_floor(self, floor: FloatArray) -> "RadiusCurve":
        """Return the curve raised to the smallest radius ever bounded, (points,)."""
        below = self.required < floor
        return RadiusCurve(
            self.frequency,
            np.where(below, floor, self.required),
            np.where(below, -1, self.setter),
        )

    def joined(self, other: "RadiusCurve") -> "RadiusCurve":
        """Return both curves' points in order, equal frequencies once."""
        frequency, first = np.unique(
            np.concatenate([self.frequency, other.frequency]), return_index=True
        )
        return RadiusCurve(
            frequency,
            np.concatenate([self.required, other.required])[first],
            np.concatenate([self.setter, other.setter])[first],
        )

    def larger(self, other: "RadiusCurve") -> "RadiusCurve":
        """Return the pointwise larger of two curves on the same points, this one on a tie."""
        wins = other.required > self.required
        return RadiusCurve(
            self.frequency,
            np.where(wins, other.required, self.required),
            np.where(wins, other.setter, self.setter),
        )

    def decisive(self) -> BoolArray:
        """Return points between which the curve is straight to 0.01 dB, none 2 % apart."""
        log_frequency = np.log(self.frequency)
        keep = thinned(log_frequency, decibels(self.required), THINNING_DB)
        cells = np.floor(log_frequency / WIDEST_GAP)
        keep[np.flatnonzero(np.diff(cells, prepend=cells[0]) > 0.0)] = True
        return keep

    def shortfall(self, weight: MagnitudeWeight) -> float:
        """Return the factor by which the weight has to grow to hold every point."""
        return float(np.max(self.required / weight.magnitude(self.frequency)))

    def missed(self, weight: MagnitudeWeight, profile: FloatArray, level: float) -> IntArray:
        """Return points where a weight fitted to some of them is not what it states.

        Those are the peaks above `level` of required / |W|, and of |W| / (required profile) over
        the weight's own excess.
        """
        ratio = weight.magnitude(self.frequency) / self.required
        allowed = profile * 10.0 ** (weight.excess_db / 20.0)
        return np.union1d(_peaks(1.0 / ratio, level), _peaks(ratio / allowed, level))

    def excess_db(self, weight: MagnitudeWeight, profile: FloatArray) -> float:
        """Return the largest |W| / (required profile) over the points, dB."""
        ratio = weight.magnitude(self.frequency) / (self.required * profile)
        return float(np.max(decibels(ratio)))


def _peaks(ratio: FloatArray, level: float) -> IntArray:
    """Return the local maxima above `level`."""
    padded = np.concatenate([[-np.inf], ratio, [-np.inf]])
    return np.flatnonzero((ratio >= padded[:-2]) & (ratio > padded[2:]) & (ratio > level))


def interpolated(curve: Sequence[tuple[float, float]], frequency: FloatArray) -> FloatArray:
    """Return pairs (Hz, value) linear over log frequency, ends held."""
    known, values = np.array(curve, dtype=float).T
    return np.asarray(np.interp(np.log(frequency), np.log(known), values), dtype=float)


def decibels(ratio: FloatArray) -> FloatArray:
    """Return 20 log10."""
    return np.asarray(20.0 * np.log10(ratio), dtype=float)
