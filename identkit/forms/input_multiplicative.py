"""Multiplicative sets at the input: P = P0 (1 + W Delta), ||Delta|| <= 1.

Scalar plants have the radius, and so the weight, of the multiplicative form; what stands around
Delta differs: the error comes in before the nominal. Source: S. Skogestad, I. Postlethwaite,
*Multivariable Feedback Control*, 2nd ed. 2005, section 8.2.
"""

from typing import ClassVar

from identkit.forms.multiplicative import Multiplicative
from identkit.plant_set.fields import Interconnection, Matrices
from identkit.plant_set.interconnection import input_multiplicative


class InputMultiplicative(Multiplicative):
    """P0 (1 + L Delta R)."""

    name: ClassVar[str] = "input-multiplicative"

    def interconnection(
        self, nominal: Matrices, left: Matrices, right: Matrices
    ) -> Interconnection:
        """Return z = R u, y = P0 (u + L w)."""
        return input_multiplicative(nominal, left, right)


INPUT_MULTIPLICATIVE = InputMultiplicative()
