"""Common factor that takes the slope of a base out of plant and nominal before they are compared.

A factor shared by plant and nominal leaves every relative radius as it is. P(s) (s + zero)^2 /
((s + first)(s + second)) has no pole at rest when P has a double integrator (zero = 0), and spares
the numbers the decades over which a plant above its pivot falls. Realised by partial fractions: a
filter in series would subtract nearly equal numbers (T. Kailath, *Linear Systems*, 1980, sec. 2.1).
"""

from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import ComplexArray
from identkit.methods.modal_model import TWO_PI, ModalParameters
from identkit.methods.state_space import StateSpace, modal_realisation, parallel


@dataclass(frozen=True)
class Levelling:
    """The factor (s + zero)^2/((s + first)(s + second)).

    Attributes
    ----------
    zero, first, second
        rad/s; first and second positive.
    """

    zero: float
    first: float
    second: float

    def __call__(self, s: ComplexArray) -> ComplexArray:
        """Return the factor at complex frequencies `s`, rad/s."""
        ratio = (s + self.zero) ** 2 / ((s + self.first) * (s + self.second))
        return np.asarray(ratio, dtype=complex)


def levelling(nominal: ModalParameters, high: float) -> Levelling | None:
    """Return the factor that suits a nominal up to `high` (Hz); base "none" needs none."""
    if nominal.base == "none":
        return None
    zero = 0.0 if nominal.base == "free" else TWO_PI * nominal.base_frequency
    return Levelling(zero, 0.7 * TWO_PI * high, 2.3 * TWO_PI * high)


def levelled_realisation(parameters: ModalParameters, factor: Levelling | None) -> StateSpace:
    """Realise factor times the modal plant without its delay.

    Raises
    ------
    ValueError
        If the base is "free" and there is no factor with zero = 0 to take its poles away.
    """
    if parameters.base != "free":
        plant = modal_realisation(parameters)
        return plant if factor is None else _levelled(plant, 0.0, factor)
    if factor is None or factor.zero != 0.0:
        raise ValueError("a free base needs a levelling with zero 0, found none")
    flexible = modal_realisation(replace(parameters, base="none"))
    return _levelled(flexible, parameters.base_gain, factor)


def _levelled(plant: StateSpace, base_gain: float, factor: Levelling) -> StateSpace:
    """Split factor * plant + base_gain/((s + first)(s + second)) into the plant's poles and two.

    The factor at the plant's own poles is a function of A, so every mode keeps its block and is
    scaled, not subtracted from.
    """
    eye = np.eye(plant.states)
    below = (plant.A + factor.first * eye) @ (plant.A + factor.second * eye)
    above = (plant.A + factor.zero * eye) @ (plant.A + factor.zero * eye)
    output = np.linalg.solve(below.T, (plant.C @ above).T).T
    corners = (factor.first, factor.second)
    blocks = [StateSpace(plant.A, plant.B, np.asarray(output, dtype=float), plant.D)]
    for corner, other in (corners, corners[::-1]):
        value = plant.C @ np.linalg.solve(-corner * eye - plant.A, plant.B) + plant.D
        residue = (float(value[0, 0]) * (factor.zero - corner) ** 2 + base_gain) / (other - corner)
        blocks.append(_first_order(corner, residue))
    return parallel(blocks)


def _first_order(corner: float, residue: float) -> StateSpace:
    gain = np.sqrt(abs(residue)) if residue else 1.0
    return StateSpace(
        np.array([[-corner]]), np.array([[gain]]), np.array([[residue / gain]]), np.zeros((1, 1))
    )
