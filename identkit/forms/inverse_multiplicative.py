"""Inverse multiplicative sets of scalar plants: P = (1 + W Delta)^-1 P0, ||Delta|| <= 1.

The least Delta that explains a plant is (P0/P - 1)/W. The form suits spread that is largest at low
frequency, or in a pole: an uncertain time constant is one exactly (S. Skogestad, I. Postlethwaite,
*Multivariable Feedback Control*, 2nd ed. 2005, section 7.4). Where |W| >= 1 the norm alone does not
make a member: 1 + W Delta may then turn around zero, and |W S| < 1 would no longer stabilise the
plant. A plant therefore counts only if P0/P makes no turn around zero over the band, which holds of
itself where |W| < 1.
"""

from typing import ClassVar

import numpy as np

from identkit.forms.scalar_form import PlantRoots, ScalarForm
from identkit.methods.arrays import ComplexArray
from identkit.plant_set.fields import Interconnection, Matrices
from identkit.plant_set.interconnection import inverse_multiplicative


class InverseMultiplicative(ScalarForm):
    """(1 + L Delta R)^-1 P0."""

    name: ClassVar[str] = "inverse-multiplicative"
    counts_turns: ClassVar[bool] = True

    def error(
        self, plant: ComplexArray, nominal: ComplexArray, allpass: ComplexArray | float = 1.0
    ) -> ComplexArray:
        """Return P0/P - 1."""
        return np.asarray(nominal / plant / allpass - 1.0, dtype=complex)

    def error_poles(self, plant: PlantRoots, nominal: PlantRoots) -> ComplexArray:
        """Return the plant's zeros and the nominal's poles."""
        return np.concatenate([plant.zeros, nominal.poles])

    def interconnection(
        self, nominal: Matrices, left: Matrices, right: Matrices
    ) -> Interconnection:
        """Return z = R y, y = P0 u - L w."""
        return inverse_multiplicative(nominal, left, right)


INVERSE_MULTIPLICATIVE = InverseMultiplicative()
