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


def parameter_names(base: str, modes: int, *, general: bool) -> tuple[str, ...]:
    """Return the names of the parameters of one plant in the order covariances use.

    Delay and feedthrough come first whether they were fitted or held (then their covariance is
    zero), then the base, then frequency, damping ratio, residue (and residue rate, where
    `general`) of mode 1, 2, ...
    """
    names = ["delay", "feedthrough"]
    if base == "free":
        names += ["base_gain"]
    if base == "pivot":
        names += ["base_frequency", "base_damping_ratio", "base_residue"]
    kinds = ["modal_frequency", "damping_ratio", "residue"] + ["residue_rate"] * general
    return (*names, *(f"{kind}_{k + 1}" for k in range(modes) for kind in kinds))


def modal_derivatives(
    frequency: FloatArray, parameters: ModalParameters, *, general: bool
) -> ComplexArray:
    """Return the derivatives of the frequency response by every parameter.

    Parameters
    ----------
    frequency
        (points,) Hz.
    parameters
        The plant.
    general
        Whether residue rates count as parameters.

    Returns
    -------
    ComplexArray
        (points, parameters) in natural units, in the order of `parameter_names`.
    """
    omega = TWO_PI * np.asarray(frequency, dtype=float)
    turn = np.exp(-1j * omega * parameters.delay)
    columns = [-1j * omega * modal_response(frequency, parameters) / turn, np.ones_like(turn)]
    if parameters.base == "free":
        columns.append(-1.0 / omega**2 + 0j)
    if parameters.base == "pivot":
        columns += _section_derivatives(
            omega,
            parameters.base_frequency,
            parameters.base_damping_ratio,
            parameters.base_residue,
            0.0,
        )[:3]
    for k in range(parameters.modal_frequency.size):
        columns += _section_derivatives(
            omega,
            parameters.modal_frequency[k],
            parameters.damping_ratio[k],
            parameters.residue[k],
            parameters.residue_rate[k],
        )[: 4 if general else 3]
    return np.asarray(np.column_stack(columns) * turn[:, None], dtype=complex)


def _section_derivatives(
    omega: FloatArray, hertz: float, damping: float, residue: float, rate: float
) -> list[ComplexArray]:
    """By frequency (Hz), damping ratio, residue, residue rate."""
    natural, s = TWO_PI * hertz, 1j * omega
    inverse = 1.0 / (natural**2 + 2.0 * damping * natural * s + s**2)
    common = -(residue + s * rate) * inverse**2
    by_frequency = common * (2.0 * natural + 2.0 * damping * s) * TWO_PI
    return [by_frequency, common * 2.0 * natural * s, inverse, s * inverse]


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
