"""The resonances of a set's nominal, named as the study named its modes where that can be told."""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.plant_set.fields import PlantSetFields
from identkit.plant_set.reach import as_continuous
from identkit.plant_set.response import TWO_PI, balance
from identkit.plant_set.schur import zeros

MOST_DAMPED = 0.3
SAME = 1e-4
NEAR = 0.2
PIVOT = "pivot"


@dataclass(frozen=True, eq=False)
class Resonances:
    """Resonances by rising frequency.

    Attributes
    ----------
    names
        Names of modes; empty where they cannot be told.
    frequency
        (modes,) Hz.
    damping_ratio
        (modes,).
    """

    names: tuple[str, ...]
    frequency: FloatArray
    damping_ratio: FloatArray

    def nearest(self, frequency: float) -> str:
        """Return the nearest resonance on a log scale in words."""
        if not self.frequency.size or not frequency > 0.0:
            return "no resonance"
        k = int(np.argmin(np.abs(np.log(self.frequency / frequency))))
        named = f"{self.names[k]} at " if self.names[k] else ""
        resonance = f"{named}{self.frequency[k]:.5g} Hz"
        if abs(np.log(self.frequency[k] / frequency)) > NEAR:
            return f"far from the nominal's resonances (nearest {resonance})"
        return f"near the nominal's resonance {resonance}"


def resonances(contents: PlantSetFields) -> Resonances:
    """Return the resonances of the nominal of a set.

    The file does not name the nominal's poles. Modes are numbered by frequency, so the names
    follow once the base and the all-pass of the delay are left out; they are kept only where they
    agree with every mode that the set's own attribution names.
    """
    period = contents.time.period
    poles = np.linalg.eigvals(balance(contents.nominal).A).astype(complex)
    mirrored = zeros(contents.nominal, TWO_PI * contents.band[1])
    poles = as_continuous(_without_all_pass(poles, mirrored, period), period)
    upper = poles[poles.imag > 0.0]
    ratio = -upper.real / np.abs(upper)
    light = ratio < MOST_DAMPED
    hertz, ratio = np.abs(upper[light]) / TWO_PI, ratio[light]
    order = np.argsort(hertz)
    hertz, ratio = hertz[order], ratio[order]
    return Resonances(_names(contents, hertz), hertz, ratio)


def _without_all_pass(poles: ComplexArray, zeros_: ComplexArray, period: float) -> ComplexArray:
    """Leave out poles with a zero opposite to them: the delay's stand-in."""
    opposite = 1.0 / np.conj(poles) if period > 0.0 else -np.conj(poles)
    if not zeros_.size:
        return poles
    apart = np.abs(opposite[:, None] - zeros_).min(axis=1)
    return np.asarray(poles[apart > SAME * np.abs(opposite)])


def _names(contents: PlantSetFields, hertz: FloatArray) -> tuple[str, ...]:
    blank = ("",) * hertz.size
    bases = [plant.base_frequency for plant in contents.plants if plant.base == "pivot"]
    at = -1
    if bases and hertz.size:
        apart = np.abs(np.log(hertz / float(np.median(bases))))
        at = int(apart.argmin()) if apart.min() < 0.5 else -1
    names, count = [], 0
    for k in range(hertz.size):
        count += k != at
        names.append(PIVOT if k == at else f"M{count}")
    for line in contents.attribution:
        if hertz.size and line.frequency > 0.0 and line.mode not in ("", PIVOT):
            nearest = int(np.argmin(np.abs(np.log(hertz / line.frequency))))
            if names[nearest] != line.mode:
                return blank
    return tuple(names)
