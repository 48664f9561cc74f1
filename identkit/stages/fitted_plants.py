"""Plants out of a modes dataset, and the responses that have none."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.methods.modal_model import BASES, ModalParameters
from identkit.outcomes import ADVICE, Outcome, slug
from identkit.plants import lacks_plant, plant_parameters


@dataclass(frozen=True)
class FittedPlants:
    """Every plant that can be rebuilt, in the order of the dataset.

    Attributes
    ----------
    index
        (plants,) positions along `response`.
    parameters
        One set of modal parameters per plant; extra modes are in, modes not found are not.
    names
        Ids along `response` of the plants.
    missing
        Reason by id for the responses that have no plant.
    """

    index: tuple[int, ...]
    parameters: tuple[ModalParameters, ...]
    names: tuple[str, ...]
    missing: Mapping[str, str]

    def without(self, names: Mapping[str, str]) -> "FittedPlants":
        """Return the plants that are not named, the named ones added to the missing."""
        kept = [k for k, name in enumerate(self.names) if name not in names]
        return FittedPlants(
            tuple(self.index[k] for k in kept),
            tuple(self.parameters[k] for k in kept),
            tuple(self.names[k] for k in kept),
            {**self.missing, **{n: names[n] for n in self.names if n in names}},
        )


def fitted_plants(modes: xr.Dataset) -> FittedPlants:
    """Rebuild every fitted plant, extra modes included.

    Raises
    ------
    InputError
        If the data are not scalar, the base is unknown, or no response was fitted.
    """
    _refuse_other_shapes(modes)
    names = [str(name) for name in modes["response"].values]
    plants = [plant_parameters(modes, k) for k in range(len(names))]
    lacking = lacks_plant(modes)
    reasons = [
        _by_outcome(modes, k) if lacking[k] else _by_value(plant) for k, plant in enumerate(plants)
    ]
    kept = [k for k, reason in enumerate(reasons) if not reason]
    if not kept:
        raise InputError(Problem("modes", f"none of {len(names)} responses fitted", "at least one"))
    return FittedPlants(
        tuple(kept),
        tuple(plants[k] for k in kept),
        tuple(names[k] for k in kept),
        {name: reason for name, reason in zip(names, reasons, strict=True) if reason},
    )


def _refuse_other_shapes(modes: xr.Dataset) -> None:
    shape = (modes.sizes["output"], modes.sizes["input"])
    if shape != (1, 1):
        found = f"{shape[0]} outputs and {shape[1]} inputs"
        raise InputError(Problem("modes", found, "one output and one input"))
    base = modes.attrs.get("base")
    if base not in BASES:
        raise InputError(Problem("modes, attribute base", repr(base), " or ".join(BASES)))


def _by_outcome(modes: xr.Dataset, k: int) -> str:
    outcome = Outcome(int(modes["fit_outcome"].values[k]))
    left = ""
    if outcome == Outcome.NO_MODES and "unexplained_share" in modes:
        share = float(modes["unexplained_share"].values[k])
        left = f", and the rest of the model leaves {share:.0%} of the response"
    return f"{slug(outcome)}: {ADVICE[outcome].happened}{left}"


def _by_value(plant: ModalParameters) -> str:
    for name, value in vars(plant).items():
        if not isinstance(value, str) and not np.all(np.isfinite(value)):
            return f"its {name.replace('_', ' ')} is missing"
    return ""
