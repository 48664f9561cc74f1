"""The plant set as an object: its responses, its members, the reach of other plants, its file."""

from collections.abc import Sequence
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING, Any

from identkit.errors import InputError, Problem
from identkit.plant_set import response, sample, store
from identkit.plant_set.fields import (
    ComplexArray,
    FittedPlant,
    FloatArray,
    Matrices,
    PlantSetFields,
)

if TYPE_CHECKING:
    from identkit.plant_set.reach import Reach


class PlantSet(PlantSetFields):
    """A nominal plant, fixed weights and bounded unknowns that hold every measured plant."""

    def __repr__(self) -> str:
        low, high = self.band
        return (
            f"<PlantSet: {self.form}, {low:g} to {high:g} Hz, {len(self.outputs)} x "
            f"{len(self.inputs)}, {self.nominal.states} states, {len(self.plants)} plants>"
        )

    def frequency_response(
        self, frequency: FloatArray, delta: Sequence[Matrices] | None = None
    ) -> ComplexArray:
        """Return the response of the nominal, or of the member that blocks `delta` make.

        Parameters
        ----------
        frequency
            (points,) Hz.
        delta
            One stable system per block, norm at most 1; None for the nominal.

        Returns
        -------
        ComplexArray
            (outputs, inputs, points) output/input.
        """
        if delta is None:
            return response.nominal_response(self, frequency)
        return response.member_response(self, frequency, delta)

    def sample(self, n: int, seed: int = 0) -> list["sample.Member"]:
        """Draw `n` members of the set at random; the same seed gives the same members."""
        return sample.draw_members(self, n, seed)

    def reach(self, plants: Sequence[FittedPlant] | None = None) -> "Reach":
        """Return the reach of fitted plants over the band; None for the plants of the set.

        Returns
        -------
        Reach
            `value` (plants,) and `frequency` (plants,) Hz.
        """
        # scipy is needed here only: loading, sampling and responses do with numpy.
        module = import_module("identkit.plant_set.reach")
        result: Reach = module.reach_of_plants(self, self.plants if plants is None else plants)
        return result

    def reach_of_response(self, frequency: FloatArray, measured: ComplexArray) -> "Reach":
        """Return the reach of a measured response at its own points, noise and all.

        Parameters
        ----------
        frequency
            (points,) Hz; points outside the band do not count.
        measured
            (outputs, inputs, points), or (points,) for a scalar plant; NaN points do not count.
        """
        module = import_module("identkit.plant_set.reach")
        result: Reach = module.reach_of_response(self, frequency, measured)
        return result

    def save(self, path: str | Path, format: str | None = None) -> None:
        """Write the set; `format` "json" or "hdf5", by the file's suffix where None."""
        store.write_fields(self, path, format)

    def to_control(self) -> dict[str, Any]:
        """Return nominal, weights and interconnection as objects of the python-control library.

        Returns
        -------
        dict
            "nominal", "interconnection" and, where the form has them, "left" and "right":
            ``control.StateSpace``. A nominal delay stands outside and is not in them.

        Raises
        ------
        InputError
            If the library is not installed.
        """
        try:
            control = import_module("control")
        except ImportError as error:
            problem = Problem("to_control", "no python-control", "pip install identkit[control]")
            raise InputError(problem) from error
        period = self.time.period if self.time.domain == "sampled" else 0
        parts = {
            "nominal": self.nominal,
            "interconnection": self.interconnection,
            "left": self.weights.left,
            "right": self.weights.right,
        }
        return {
            name: control.StateSpace(
                part.A, part.B, part.C, part.D, period, remove_useless_states=False
            )
            for name, part in parts.items()
            if part is not None
        }

    @classmethod
    def load(cls, path: str | Path) -> "PlantSet":
        """Read a set file; see `files.load_set`."""
        return cls(**vars(store.read_fields(path)))
