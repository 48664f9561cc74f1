"""Plants against one nominal in a given form: at points, and by level test between them."""

import numpy as np

from identkit.forms.nominal_plant import NominalPlant
from identkit.forms.scalar_form import PlantRoots, ScalarForm
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.level_crossings import LevelCrossings, SquaredGain
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import TWO_PI, ModalParameters, modal_response
from identkit.methods.modal_transfer import modal_value
from identkit.methods.pade_delay import pade_error, pade_order, pade_phase, pade_real

DELAY_TOLERANCE = 1e-9


class CommonPart:
    """What all comparisons with one nominal over one band share.

    Parameters
    ----------
    nominal
        The nominal.
    low, high
        Hz, ends of the band.
    form
        Form of the set.
    """

    def __init__(self, nominal: NominalPlant, low: float, high: float, form: ScalarForm) -> None:
        self.nominal, self.low, self.high, self.form = nominal, low, high, form
        self.roots = PlantRoots(nominal.parameters, nominal.delay_order)

    def error(self, frequency: FloatArray, plant: ModalParameters) -> ComplexArray:
        """Return the error of a plant at `frequency` (points,) Hz, delays exact."""
        return self.form.error(modal_response(frequency, plant), self.nominal.response(frequency))

    def reference(self, frequency: FloatArray) -> FloatArray:
        """Return the magnitude of an error of 100 % at `frequency` (points,) Hz."""
        return self.form.reference(self.nominal.response(frequency))


class PlantComparison:
    """One plant against the nominal: the ratio at points, and its level test between them.

    Parameters
    ----------
    plant
        The plant, its delay exact.
    common
        The nominal's part, and the form.

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
        roots = PlantRoots(plant, self.delay_order)
        self._poles = common.form.error_poles(roots, common.roots)

    def ratio(self, frequency: FloatArray, weight: MagnitudeWeight) -> FloatArray:
        """Return |error| / |W| at `frequency` (points,) Hz with exact delays."""
        error = self.common.error(frequency, self.plant)
        return np.asarray(np.abs(error) / weight.magnitude(frequency), dtype=float)

    def level_test(self, weight: MagnitudeWeight) -> LevelCrossings:
        """Return the level test of error / W, the plant's delay rational."""
        gain = SquaredGain(
            lambda omega: self._on_axis(omega) / weight.magnitude(omega / TWO_PI) ** 2,
            lambda s: self._off_axis(s) / _squared_weight(weight, s),
            np.concatenate([self._poles, weight.zeros]),
        )
        return LevelCrossings(gain, TWO_PI * self.common.low, TWO_PI * self.common.high)

    def _on_axis(self, omega: FloatArray) -> FloatArray:
        """Return |error|^2 on the axis."""
        nominal = self.common.nominal
        lag = pade_phase(omega * self.plant.delay, self.delay_order)
        lag = lag - pade_phase(omega * nominal.parameters.delay, nominal.delay_order)
        s = np.asarray(1j * omega, dtype=complex)
        # The all-pass common to both has magnitude 1 and divides out.
        error = self.common.form.error(
            modal_value(s, self.plant),
            modal_value(s, nominal.parameters),
            np.asarray(np.exp(-1j * lag), dtype=complex),
        )
        return np.asarray(np.abs(error) ** 2, dtype=float)

    def _off_axis(self, s: float) -> float:
        """Return error(s) error(-s) at one real s."""
        nominal = self.common.nominal
        both: ComplexArray = np.array([s, -s], dtype=complex)
        allpass = pade_real(s * self.plant.delay, self.delay_order) / pade_real(
            s * nominal.parameters.delay, nominal.delay_order
        )
        error = self.common.form.error(
            modal_value(both, self.plant),
            modal_value(both, nominal.parameters),
            np.array([allpass, 1.0 / allpass], dtype=complex),
        )
        return float((error[0] * error[1]).real)


def _squared_weight(weight: MagnitudeWeight, s: float) -> float:
    """Return W(s) W(-s)."""
    factors = (weight.zeros**2 - s**2) / (weight.poles**2 - s**2)
    return float(weight.gain**2 * factors.prod().real)
