"""The nominal plant as it is exported: a modal model whose delay is rational already."""

from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.pade_delay import pade_response
from identkit.methods.state_space import StateSpace, modal_realisation


@dataclass(frozen=True)
class NominalPlant:
    """A scalar nominal.

    Attributes
    ----------
    parameters
        Modal parameters; their delay is the one the all-pass stands for.
    delay_order
        Order of the Pade all-pass inside the state space; 0 leaves the delay out altogether.
    """

    parameters: ModalParameters
    delay_order: int

    def without_delay(self) -> ModalParameters:
        """Return the modal part alone."""
        return replace(self.parameters, delay=0.0)

    def response(self, frequency: FloatArray) -> ComplexArray:
        """Return the response of the exported matrices at `frequency` (points,) Hz."""
        phase = TWO_PI * np.asarray(frequency, dtype=float) * self.parameters.delay
        flexible = modal_response(frequency, self.without_delay())
        return np.asarray(flexible * pade_response(phase, self.delay_order), dtype=complex)

    def realisation(self) -> StateSpace:
        """Return A, B, C, D with the delay inside."""
        return modal_realisation(self.parameters, self.delay_order)
