"""What a form of uncertainty set of scalar plants says of itself.

A form is known by the error that its weight has to cover; curves, level tests and certificates
follow from it. Delays come in as the all-pass by which plant and nominal differ.
"""

from abc import ABC, abstractmethod
from functools import cached_property
from typing import ClassVar

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import ModalParameters
from identkit.methods.modal_transfer import modal_poles, modal_zeros
from identkit.methods.pade_delay import pade_poles
from identkit.plant_set.fields import Interconnection, Matrices


class PlantRoots:
    """Poles and zeros of a plant whose delay is an all-pass.

    Parameters
    ----------
    parameters
        The plant.
    delay_order
        Order of the all-pass.
    """

    def __init__(self, parameters: ModalParameters, delay_order: int) -> None:
        self._parameters = parameters
        self._delay = pade_poles(parameters.delay, delay_order)

    @cached_property
    def poles(self) -> ComplexArray:
        """(poles,) rad/s; the two at rest of a free base are left out."""
        return np.concatenate([modal_poles(self._parameters), self._delay])

    @cached_property
    def zeros(self) -> ComplexArray:
        """(zeros,) rad/s, inf for those at infinity; those of the all-pass mirror its poles."""
        return np.concatenate([modal_zeros(self._parameters), -self._delay])


class ScalarForm(ABC):
    """One form of uncertainty set of scalar plants."""

    name: ClassVar[str]
    counts_turns: ClassVar[bool] = False
    """Whether a member's response must not turn around zero beside the nominal's."""

    def accepts(self, outputs: int, inputs: int, base: str) -> None:
        """Refuse plants that the form cannot describe.

        Raises
        ------
        InputError
            Naming the shape or the base found.
        """
        accepts_scalar(outputs, inputs)

    @abstractmethod
    def error(
        self, plant: ComplexArray, nominal: ComplexArray, allpass: ComplexArray | float = 1.0
    ) -> ComplexArray:
        """Return the error that the weight covers, W Delta.

        Parameters
        ----------
        plant, nominal
            (points,) values at the same complex frequencies.
        allpass
            (points,) what `plant` is still to be multiplied by.
        """

    @abstractmethod
    def error_poles(self, plant: PlantRoots, nominal: PlantRoots) -> ComplexArray:
        """Return the poles of the error, rad/s, up to their mirror images in the axis."""

    def reference(self, nominal: ComplexArray) -> FloatArray:
        """Return the magnitude that an error of 100 % has, (points,)."""
        return np.ones(nominal.shape)

    @abstractmethod
    def interconnection(
        self, nominal: Matrices, left: Matrices, right: Matrices
    ) -> Interconnection:
        """Return what stands around Delta, weights absorbed."""


def accepts_scalar(outputs: int, inputs: int) -> None:
    """Refuse plants that are not scalar.

    Raises
    ------
    InputError
        Naming the shape found.
    """
    if (outputs, inputs) != (1, 1):
        found = f"{outputs} outputs and {inputs} inputs"
        raise InputError(Problem("[bound] form", found, "one output and one input"))
