"""Many fitted plants as arrays, evaluated together."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from identkit.plant_set.fields import ComplexArray, FittedPlant, FloatArray, IntArray
from identkit.plant_set.response import TWO_PI
from identkit.plant_set.zero_order_hold import held_terms, split_delay


@dataclass(frozen=True, eq=False)
class StackedPlants:
    """Plants of one shape; every base but the free one counts as a mode, short ones are padded.

    Attributes
    ----------
    natural, loss
        (plants, modes) w_k in rad/s and 2 zeta_k w_k.
    residue, residue_rate
        (plants, modes, outputs, inputs).
    base_gain, feedthrough
        (plants, outputs, inputs).
    delay
        (plants,) s.
    """

    natural: FloatArray
    loss: FloatArray
    residue: FloatArray
    residue_rate: FloatArray
    base_gain: FloatArray
    feedthrough: FloatArray
    delay: FloatArray

    @property
    def shape(self) -> tuple[int, int]:
        """(outputs, inputs)."""
        return self.feedthrough.shape[1], self.feedthrough.shape[2]

    def response(self, row: IntArray, frequency: FloatArray, period: float = 0.0) -> ComplexArray:
        """Return the responses of the plants `row` (rows,) at their own frequencies.

        Parameters
        ----------
        row
            (rows,) which plants.
        frequency
            (rows, points) Hz.
        period
            s; above 0 the plants are sampled behind a zero-order hold.

        Returns
        -------
        ComplexArray
            (rows, points, outputs, inputs).
        """
        if period > 0.0:
            return self._sampled(row, frequency, period)
        s = 1j * TWO_PI * frequency
        square = s * s
        total = np.repeat(self.feedthrough[row, None].astype(complex), s.shape[1], axis=1)
        if np.any(self.base_gain):
            total += self.base_gain[row, None] / square[..., None, None]
        general = bool(np.any(self.residue_rate))
        for k in range(self.natural.shape[1]):
            natural, loss = self.natural[row, k, None], self.loss[row, k, None]
            below = 1.0 / (natural * natural + s * loss + square)
            total += self.residue[row, None, k] * below[..., None, None]
            if general:
                total += self.residue_rate[row, None, k] * (s * below)[..., None, None]
        return np.asarray(total * np.exp(-s * self.delay[row, None])[..., None, None])

    def _sampled(self, row: IntArray, frequency: FloatArray, period: float) -> ComplexArray:
        z = np.exp(1j * TWO_PI * frequency * period)
        whole, fraction = split_delay(self.delay[row], period)
        # A direct term answers at once: behind a fraction of a period it sees the input before.
        direct = np.where(fraction[:, None] > 0.0, 1.0 / z, 1.0)
        total: ComplexArray = self.feedthrough[row, None] * direct[..., None, None].astype(complex)
        terms = held_terms(self.natural[row], self.loss[row], fraction, period)
        for k in range(self.natural.shape[1]):
            place, speed = terms.states(k, z)
            total += self.residue[row, None, k] * place[..., None, None]
            total += self.residue_rate[row, None, k] * speed[..., None, None]
        if np.any(self.base_gain):
            still = np.zeros((row.size, 1))
            place, _ = held_terms(still, still, fraction, period).states(0, z)
            total += self.base_gain[row, None] * place[..., None, None]
        return np.asarray(total * (z ** -whole[:, None])[..., None, None])


def plants_at(
    plants: Sequence[FittedPlant], frequency: FloatArray, period: float = 0.0
) -> ComplexArray:
    """Return (plants, points, outputs, inputs) responses of plants on one grid (points,) of Hz."""
    grid = np.broadcast_to(frequency, (len(plants), frequency.size))
    return stack(plants).response(np.arange(len(plants)), grid, period)


def stack(plants: Sequence[FittedPlant]) -> StackedPlants:
    """Return plants of one shape as arrays."""
    modes = max(plant.modal_frequency.size + (plant.base == "pivot") for plant in plants)
    shape = plants[0].feedthrough.shape
    natural, loss = np.ones((2, len(plants), modes))
    residue, rate = np.zeros((2, len(plants), modes, *shape))
    for row, plant in enumerate(plants):
        count = plant.modal_frequency.size
        natural[row, :count] = TWO_PI * plant.modal_frequency
        loss[row, :count] = 2.0 * plant.damping_ratio * natural[row, :count]
        residue[row, :count], rate[row, :count] = plant.residue, plant.residue_rate
        if plant.base == "pivot":
            natural[row, count] = TWO_PI * plant.base_frequency
            loss[row, count] = 2.0 * plant.base_damping_ratio * natural[row, count]
            residue[row, count] = plant.base_residue
    return StackedPlants(
        natural,
        loss,
        residue,
        rate,
        np.array([plant.base_gain for plant in plants]),
        np.array([plant.feedthrough for plant in plants]),
        np.array([plant.delay for plant in plants]),
    )
