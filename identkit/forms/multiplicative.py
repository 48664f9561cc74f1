"""Multiplicative sets of scalar plants: P = P0 (1 + W Delta), ||Delta|| <= 1.

The least Delta that explains a plant is (P - P0)/(W P0), so the reach of a plant is the largest
|P - P0| / |W P0| over the band. A radius of 1 says nothing is known of the phase; the form suits
every base, because a double integrator common to plant and nominal divides out.
"""

from collections.abc import Sequence

import numpy as np

from identkit.errors import InputError, Problem
from identkit.forms.nominal_plant import NominalPlant
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.level_crossings import LevelCrossings, SquaredGain
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.modal_transfer import modal_poles, modal_value, modal_zeros
from identkit.methods.pade_delay import pade_error, pade_order, pade_phase, pade_poles, pade_real

NAME = "multiplicative"
DELAY_TOLERANCE = 1e-9


def accepts(outputs: int, inputs: int) -> None:
    """Refuse plants that are not scalar.

    Raises
    ------
    InputError
        Naming the shape found.
    """
    if (outputs, inputs) != (1, 1):
        found = f"{outputs} outputs and {inputs} inputs"
        raise InputError(Problem("[bound] form", found, "one output and one input"))


def relative_errors(
    frequency: FloatArray, plants: Sequence[ModalParameters], nominal: NominalPlant
) -> ComplexArray:
    """Return P_i/P0 - 1, (plants, points), at `frequency` (points,) Hz, delays exact."""
    centre = nominal.response(frequency)
    errors = np.empty((len(plants), len(centre)), dtype=complex)
    for row, plant in enumerate(plants):
        errors[row] = modal_response(frequency, plant) / centre - 1.0
    return errors


class CommonPart:
    """What all comparisons with one nominal over one band share.

    Parameters
    ----------
    nominal
        The nominal.
    low, high
        Hz, ends of the band.
    """

    def __init__(self, nominal: NominalPlant, low: float, high: float) -> None:
        self.nominal, self.low, self.high = nominal, low, high
        # P/P0 has the nominal's zeros for poles; its all-pass has zeros opposite to its poles.
        parameters, order = nominal.parameters, nominal.delay_order
        opposite = -pade_poles(parameters.delay, order)
        self.zeros = np.concatenate([modal_zeros(parameters), opposite])


class PlantComparison:
    """One plant against the nominal: the ratio at points, and its level test between them.

    Parameters
    ----------
    plant
        The plant, its delay exact.
    common
        The nominal's part.

    Raises
    ------
    ValueError
        If the plant's delay is too long for a rational stand-in.
    """

    def __init__(self, plant: ModalParameters, common: CommonPart) -> None:
        self.plant, self.common = plant, common
        phase = TWO_PI * common.high * plant.delay
        self.delay_order = pade_order(phase, DELAY_TOLERANCE)
        self.delay_error = pade_error(phase, self.delay_order)
        own = np.concatenate([modal_poles(plant), pade_poles(plant.delay, self.delay_order)])
        self._poles = np.concatenate([own, common.zeros])

    def ratio(self, frequency: FloatArray, weight: MagnitudeWeight) -> FloatArray:
        """Return |P - P0| / |W P0| at `frequency` (points,) Hz with exact delays."""
        error = relative_errors(frequency, [self.plant], self.common.nominal)[0]
        return np.asarray(np.abs(error) / weight.magnitude(frequency), dtype=float)

    def level_test(self, weight: MagnitudeWeight) -> LevelCrossings:
        """Return the level test of (P - P0)/(W P0), the plant's delay rational."""
        gain = SquaredGain(
            lambda omega: self._on_axis(omega) / weight.magnitude(omega / TWO_PI) ** 2,
            lambda s: self._off_axis(s) / _squared_weight(weight, s),
            np.concatenate([self._poles, weight.zeros]),
        )
        return LevelCrossings(gain, TWO_PI * self.common.low, TWO_PI * self.common.high)

    def _on_axis(self, omega: FloatArray) -> FloatArray:
        """Return |P/P0 - 1|^2 on the axis."""
        nominal = self.common.nominal
        lag = pade_phase(omega * self.plant.delay, self.delay_order)
        lag = lag - pade_phase(omega * nominal.parameters.delay, nominal.delay_order)
        s = np.asarray(1j * omega, dtype=complex)
        flexible = modal_value(s, self.plant) / modal_value(s, nominal.parameters)
        return np.asarray(np.abs(flexible * np.exp(-1j * lag) - 1.0) ** 2, dtype=float)

    def _off_axis(self, s: float) -> float:
        """Return (P/P0 - 1)(s) (P/P0 - 1)(-s) at one real s."""
        nominal = self.common.nominal
        both: ComplexArray = np.array([s, -s], dtype=complex)
        flexible = modal_value(both, self.plant) / modal_value(both, nominal.parameters)
        allpass = pade_real(s * self.plant.delay, self.delay_order) / pade_real(
            s * nominal.parameters.delay, nominal.delay_order
        )
        ratio = flexible * np.array([allpass, 1.0 / allpass]) - 1.0
        return float((ratio[0] * ratio[1]).real)


def _squared_weight(weight: MagnitudeWeight, s: float) -> float:
    """Return W(s) W(-s)."""
    factors = (weight.zeros**2 - s**2) / (weight.poles**2 - s**2)
    return float(weight.gain**2 * factors.prod().real)
