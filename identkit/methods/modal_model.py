r"""The modal model of a positioning actuator: sum of second-order terms behind a delay.

.. math:: P(j\omega) = e^{-j\omega\tau} \Big[ b(\omega)
   + \sum_k \frac{r_k + j\omega q_k}{\omega_k^2 - \omega^2 + 2 j \zeta_k \omega_k \omega}
   + d \Big]

Source: D. J. Ewins, *Modal Testing: Theory, Practice and Application*, 2nd ed., 2000 (receptance
form); residue rates stand for generally damped modes.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

BASES = ("free", "pivot", "none")
TWO_PI = 2.0 * np.pi


@dataclass(frozen=True)
class ModalParameters:
    """Parameters of one scalar plant.

    Attributes
    ----------
    modal_frequency
        (modes,) undamped modal frequencies, Hz.
    damping_ratio
        (modes,) damping ratios.
    residue
        (modes,) real residues, output/input (rad/s)^2.
    residue_rate
        (modes,) residue rates, output/input (rad/s); zero for proportionally damped modes.
    base
        "free" (a double integrator), "pivot" (one strongly damped low mode) or "none".
    base_gain
        Gain g of the free base g/s^2, output/input (rad/s)^2.
    base_frequency, base_damping_ratio, base_residue
        The pivot's mode, units as above.
    feedthrough
        Constant left by the modes above the band, output/input.
    delay
        Delay, s.
    """

    modal_frequency: FloatArray
    damping_ratio: FloatArray
    residue: FloatArray
    residue_rate: FloatArray
    base: str
    base_gain: float = 0.0
    base_frequency: float = 0.0
    base_damping_ratio: float = 0.0
    base_residue: float = 0.0
    feedthrough: float = 0.0
    delay: float = 0.0


def modal_response(frequency: FloatArray, parameters: ModalParameters) -> ComplexArray:
    """Return the frequency response of the modal model.

    Parameters
    ----------
    frequency
        (points,) Hz, positive for base "free".
    parameters
        The plant.

    Returns
    -------
    ComplexArray
        (points,) output/input, convention e^{+j omega t}.
    """
    omega = TWO_PI * np.asarray(frequency, dtype=float)
    total = _base_response(omega, parameters) + parameters.feedthrough
    total = total + second_order_sum(
        omega,
        TWO_PI * parameters.modal_frequency,
        parameters.damping_ratio,
        parameters.residue,
        parameters.residue_rate,
    )
    return np.asarray(total * np.exp(-1j * omega * parameters.delay), dtype=complex)


def second_order_sum(
    omega: FloatArray,
    natural: FloatArray,
    damping_ratio: FloatArray,
    residue: FloatArray,
    residue_rate: FloatArray,
) -> ComplexArray:
    """Return the sum of second-order terms at `omega` (rad/s); `natural` is in rad/s too."""
    s = 1j * omega[:, None]
    denominator = natural**2 + s * (2.0 * damping_ratio * natural) + s**2
    return np.asarray(((residue + s * residue_rate) / denominator).sum(axis=1), dtype=complex)


def _base_response(omega: FloatArray, parameters: ModalParameters) -> ComplexArray:
    if parameters.base == "free":
        return np.asarray(-parameters.base_gain / omega**2, dtype=complex)
    if parameters.base == "none":
        return np.zeros(omega.shape, dtype=complex)
    return second_order_sum(
        omega,
        np.array([TWO_PI * parameters.base_frequency]),
        np.array([parameters.base_damping_ratio]),
        np.array([parameters.base_residue]),
        np.zeros(1),
    )
