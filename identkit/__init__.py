"""identkit: from measured frequency responses to a plant set that holds them."""

import importlib
from typing import Any

_PUBLIC = {
    "read_responses": "identkit.readers.campaign",
    "estimate_responses": "identkit.stages.estimate",
    "screen": "identkit.stages.screen",
    "fit_modes": "identkit.stages.fit",
    "pair_modes": "identkit.stages.pair",
    "describe_population": "identkit.stages.population",
    "choose_nominal": "identkit.stages.nominal",
    "bound_spread": "identkit.stages.bound",
    "state_coverage": "identkit.stages.coverage",
    "audit": "identkit.stages.audit",
    "check_controller": "identkit.controller_check",
    "compare_sets": "identkit.set_comparison",
    "read_controller": "identkit.controller",
    "load_set": "identkit.plant_set.files",
    "PlantSet": "identkit.plant_set.model",
    "run_study": "identkit.pipeline",
    "track_drift": "identkit.drift",
}

__all__ = sorted(_PUBLIC)
__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    if name not in _PUBLIC:
        raise AttributeError(f"module 'identkit' has no attribute {name!r}")
    return getattr(importlib.import_module(_PUBLIC[name]), name)


def __dir__() -> list[str]:
    return [*__all__, "__version__"]
