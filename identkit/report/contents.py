"""What a report is made from."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import xarray as xr

from identkit.grids import Gridded
from identkit.plant_set.fields import PlantSetFields


@dataclass(frozen=True)
class ReportInput:
    """Everything a report shows; a stage that has not run is None.

    Attributes
    ----------
    study_name
        As in the study file.
    responses, screening
        As written by the read and screen stages, on one grid or several.
    fits, modes, population, nominal, bound, audit
        As written by the stages of those names (`modes` by pair).
    plant_set
        The set with all its plants.
    price
        What the set costs without each part, as `attribute_price` returns it.
    coverage
        As stated by the coverage stage.
    run
        Contents of ``run.json``.
    verdict
        Sentences to put first; made from the rest where none are given.
    """

    study_name: str
    responses: Gridded
    screening: Gridded | None = None
    fits: xr.Dataset | None = None
    modes: xr.Dataset | None = None
    population: xr.Dataset | None = None
    nominal: xr.Dataset | None = None
    bound: xr.Dataset | None = None
    audit: xr.Dataset | None = None
    plant_set: PlantSetFields | None = None
    price: xr.Dataset | None = None
    coverage: Mapping[str, Any] = field(default_factory=dict)
    run: Mapping[str, Any] = field(default_factory=dict)
    verdict: tuple[str, ...] | list[str] = ()
