"""Multiplicative sets of scalar plants: P = P0 (1 + W Delta), ||Delta|| <= 1.

The least Delta that explains a plant is (P - P0)/(W P0), so the reach of a plant is the largest
|P - P0| / |W P0| over the band. A radius of 1 says nothing is known of the phase; the form suits
every base, because a double integrator common to plant and nominal divides out.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from identkit.errors import InputError, Problem
from identkit.forms.nominal_plant import NominalPlant
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.level_crossings import EvenPart, LevelTest, even_part
from identkit.methods.levelling import levelled_realisation, levelling
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.pade_delay import pade_error, pade_matrices, pade_order
from identkit.methods.state_space import StateSpace, negative, parallel, series

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


@dataclass(frozen=True)
class CommonPart:
    """What all comparisons with one nominal and one band share.

    Attributes
    ----------
    nominal
        The nominal.
    low, high
        Hz.
    flexible
        Levelled realisation of the nominal without its delay.
    delayed
        The same with the Pade all-pass behind it.
    """

    nominal: NominalPlant
    low: float
    high: float
    flexible: StateSpace = field(init=False)
    delayed: StateSpace = field(init=False)

    def __post_init__(self) -> None:
        parameters, order = self.nominal.parameters, self.nominal.delay_order
        flexible = levelled_realisation(parameters, levelling(parameters, self.high))
        object.__setattr__(self, "flexible", flexible)
        object.__setattr__(self, "delayed", _delayed(flexible, parameters.delay, order))


class PlantComparison:
    """One plant against the nominal: exact ratio at points, level test between them.

    The error's dynamics and even part do not depend on the weight and are kept.

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
        order = pade_order(phase, DELAY_TOLERANCE)
        self.delay_error = pade_error(phase, order)
        factor = levelling(common.nominal.parameters, common.high)
        own = _delayed(levelled_realisation(plant, factor), plant.delay, order)
        self._offset = own.states
        self._error = parallel([own, negative(common.delayed)])
        self._even = even_part(self._error)

    def ratio(self, frequency: FloatArray, weight: MagnitudeWeight) -> FloatArray:
        """Return |P - P0| / |W P0| at `frequency` (points,) Hz with exact delays."""
        error = relative_errors(frequency, [self.plant], self.common.nominal)[0]
        return np.asarray(np.abs(error) / weight.magnitude(frequency), dtype=float)

    def level_test(self, bound: "WeightedNominal") -> LevelTest:
        """Return the pair P - P0 and W P0 as one system that shares the nominal's states."""
        error, weight = self._error, bound.weight_states
        first, total = error.states, error.states + weight.states
        shared = self._offset + np.arange(self.common.flexible.states)
        dynamics = np.zeros((total, total))
        dynamics[:first, :first] = error.A
        dynamics[first:, first:] = weight.A
        dynamics[first:, shared] = weight.B @ self.common.flexible.C
        forced = np.concatenate([error.B[:, 0], (weight.B @ self.common.flexible.D)[:, 0]])
        row = np.zeros(total)
        row[shared], row[first:] = np.split(bound.even.row, [shared.size])
        padded = np.concatenate([self._even.row, np.zeros(weight.states)])
        return LevelTest(
            dynamics,
            forced,
            EvenPart(padded, self._even.constant),
            EvenPart(row, bound.even.constant),
        )


class WeightedNominal:
    """W P0, levelled and without the all-pass, whose modulus is 1.

    Parameters
    ----------
    weight
        The weight.
    common
        The nominal's part.
    """

    def __init__(self, weight: MagnitudeWeight, common: CommonPart) -> None:
        self.weight = weight
        self.weight_states = StateSpace(*weight.state_space())
        self.even = even_part(series(common.flexible, self.weight_states))


def _delayed(plant: StateSpace, delay: float, order: int) -> StateSpace:
    if not order or not delay:
        return plant
    return series(plant, StateSpace(*pade_matrices(delay, order)))
