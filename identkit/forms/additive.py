"""Additive sets of scalar plants: P = P0 + W Delta, ||Delta|| <= 1.

The least Delta that explains a plant is (P - P0)/W; radius and weight carry the unit output/input.
What is called 100 % of error, and the radius floor with it, is relative to |P0| at each frequency.
A free base is refused: two double integrators of different gain differ by more than any weight at
rest.
"""

from typing import ClassVar

import numpy as np

from identkit.errors import InputError, Problem
from identkit.forms.scalar_form import PlantRoots, ScalarForm
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.plant_set.fields import Interconnection, Matrices
from identkit.plant_set.interconnection import additive


class Additive(ScalarForm):
    """P0 + L Delta R."""

    name: ClassVar[str] = "additive"

    def accepts(self, outputs: int, inputs: int, base: str) -> None:
        """Refuse plants that are not scalar, and the free base."""
        super().accepts(outputs, inputs, base)
        if base == "free":
            found = '"additive" with [model] base = "free", whose spread is infinite at rest'
            expected = 'a multiplicative form, or base "pivot" or "none"'
            raise InputError(Problem("[bound] form", found, expected))

    def error(
        self, plant: ComplexArray, nominal: ComplexArray, allpass: ComplexArray | float = 1.0
    ) -> ComplexArray:
        """Return P - P0."""
        return np.asarray(plant * allpass - nominal, dtype=complex)

    def error_poles(self, plant: PlantRoots, nominal: PlantRoots) -> ComplexArray:
        """Return the poles of both."""
        return np.concatenate([plant.poles, nominal.poles])

    def reference(self, nominal: ComplexArray) -> FloatArray:
        """Return |P0|."""
        return np.asarray(np.abs(nominal), dtype=float)

    def interconnection(
        self, nominal: Matrices, left: Matrices, right: Matrices
    ) -> Interconnection:
        """Return z = R u, y = P0 u + L w."""
        return additive(nominal, left, right)


ADDITIVE = Additive()
