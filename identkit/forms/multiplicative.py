"""Multiplicative sets of scalar plants: P = P0 (1 + W Delta), ||Delta|| <= 1.

The least Delta that explains a plant is (P - P0)/(W P0), so the reach of a plant is the largest
|P - P0| / |W P0| over the band. A radius of 1 says nothing is known of the phase; the form suits
every base, because a double integrator common to plant and nominal divides out.
"""

from collections.abc import Sequence
from typing import ClassVar

import numpy as np

from identkit.forms.nominal_plant import NominalPlant
from identkit.forms.scalar_form import PlantRoots, ScalarForm, accepts_scalar
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.plant_set.fields import Interconnection, Matrices
from identkit.plant_set.interconnection import output_multiplicative

NAME = "multiplicative"
accepts = accepts_scalar


class Multiplicative(ScalarForm):
    """(1 + L Delta R) P0."""

    name: ClassVar[str] = NAME

    def error(
        self, plant: ComplexArray, nominal: ComplexArray, allpass: ComplexArray | float = 1.0
    ) -> ComplexArray:
        """Return P/P0 - 1."""
        return np.asarray(plant / nominal * allpass - 1.0, dtype=complex)

    def error_poles(self, plant: PlantRoots, nominal: PlantRoots) -> ComplexArray:
        """Return the plant's poles and the nominal's zeros."""
        return np.concatenate([plant.poles, nominal.zeros])

    def interconnection(
        self, nominal: Matrices, left: Matrices, right: Matrices
    ) -> Interconnection:
        """Return z = R P0 u, y = P0 u + L w."""
        return output_multiplicative(nominal, left, right)


MULTIPLICATIVE = Multiplicative()


def relative_errors(
    frequency: FloatArray, plants: Sequence[ModalParameters], nominal: NominalPlant
) -> ComplexArray:
    """Return P_i/P0 - 1, (plants, points), at `frequency` (points,) Hz, delays exact."""
    centre = nominal.response(frequency)
    errors = np.empty((len(plants), len(centre)), dtype=complex)
    for row, plant in enumerate(plants):
        errors[row] = modal_response(frequency, plant) / centre - 1.0
    return errors
