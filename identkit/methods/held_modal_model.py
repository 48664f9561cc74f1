"""Exact response of a modal model between a zero-order hold and a sampler, any delay.

Each pole p of the model becomes exp(pT); the delay is split in whole periods and a fraction f, and
the held input acts on the last two samples: Gamma(T - f) and exp(p(T - f)) Gamma(f), with
Gamma(t) = (exp(pt) - 1) / p (K. J. Astrom and B. Wittenmark, Computer-Controlled Systems, Prentice
Hall, section 2.3). Modes above half the rate fold by themselves.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import TWO_PI, ModalParameters

_WHOLE = 1e-9


@dataclass(frozen=True)
class HeldPoles:
    """A modal model as a sum of first-order sections at the sampling instants.

    Attributes
    ----------
    pole
        (poles,) exp(pT).
    now, before
        (poles,) gain of the newest input that counts, and of the one before it.
    residue
        (poles,) weight of each state in the output.
    direct
        Gain of the newest input that counts straight to the output; `direct_before` of the one
        before it.
    whole_periods
        Samples by which the newest input that counts lies back.
    """

    pole: ComplexArray
    now: ComplexArray
    before: ComplexArray
    residue: ComplexArray
    direct: float
    direct_before: float
    whole_periods: int


def held_poles(parameters: ModalParameters, period: float) -> HeldPoles:
    """Return the sections of a model without a free base, sampled every `period` s.

    Raises
    ------
    ValueError
        If the base is free: a double pole has no first-order sections.
    """
    if parameters.base == "free":
        raise ValueError("found a free base; expected a pivot or none")
    pole, residue = _continuous(parameters)
    whole, fraction = split_delay(parameters.delay, period)
    late = period - fraction
    now = np.expm1(pole * late) / pole
    before = np.exp(pole * late) * np.expm1(pole * fraction) / pole
    held_back = fraction > 0.0
    return HeldPoles(
        np.exp(pole * period),
        now,
        before,
        residue,
        0.0 if held_back else parameters.feedthrough,
        parameters.feedthrough if held_back else 0.0,
        whole,
    )


def held_response(
    frequency: FloatArray, parameters: ModalParameters, period: float
) -> ComplexArray:
    """Return the frequency response of the samples, (points,) output/input.

    Parameters
    ----------
    frequency
        (points,) Hz.
    parameters
        The plant, its delay included.
    period
        Of hold and sampler, s.
    """
    z = np.exp(1j * TWO_PI * np.asarray(frequency, dtype=float) * period)[:, None]
    total = np.zeros(z.shape[0], dtype=complex)
    whole, fraction = split_delay(parameters.delay, period)
    without_base = parameters
    if parameters.base == "free":
        total = total + _free_base(z[:, 0], parameters.base_gain, period, fraction)
        without_base = ModalParameters(
            parameters.modal_frequency,
            parameters.damping_ratio,
            parameters.residue,
            parameters.residue_rate,
            "none",
            feedthrough=parameters.feedthrough,
            delay=parameters.delay,
        )
    held = held_poles(without_base, period)
    sections = held.residue * (held.now + held.before / z) / (z - held.pole)
    total = total + sections.sum(axis=1) + held.direct + held.direct_before / z[:, 0]
    return np.asarray(total * z[:, 0] ** (-whole))


def split_delay(delay: float, period: float) -> tuple[int, float]:
    """Return whole periods and the fraction, s, of a delay; rounding is no fraction.

    A negative delay, which a fit may give, has a negative whole part.
    """
    whole = int(np.floor(delay / period + _WHOLE))
    fraction = delay - whole * period
    return whole, fraction if fraction > _WHOLE * period else 0.0


def _continuous(parameters: ModalParameters) -> tuple[ComplexArray, ComplexArray]:
    """Return poles, rad/s, and residues of the partial fractions."""
    frequency = parameters.modal_frequency
    damping, residue, rate = (
        parameters.damping_ratio,
        parameters.residue,
        parameters.residue_rate,
    )
    if parameters.base == "pivot":
        frequency = np.append(frequency, parameters.base_frequency)
        damping = np.append(damping, parameters.base_damping_ratio)
        residue = np.append(residue, parameters.base_residue)
        rate = np.append(rate, 0.0)
    root = np.emath.sqrt(1.0 - damping**2)
    poles = TWO_PI * frequency * np.stack([-damping + 1j * root, -damping - 1j * root])
    apart = poles - poles[::-1]
    weights = (residue + poles * rate) / apart
    return np.asarray(poles.reshape(-1), complex), np.asarray(weights.reshape(-1), complex)


def _free_base(z: ComplexArray, gain: float, period: float, fraction: float) -> ComplexArray:
    late = period - fraction
    position = 0.5 * late**2 + fraction * (period - 0.5 * fraction) / z
    speed = late + fraction / z
    return np.asarray(gain * (position + period * speed / (z - 1.0)) / (z - 1.0))
