"""One small invented study for the tests of figures."""

import importlib.util
from pathlib import Path
from types import SimpleNamespace

import pytest


def load_invented():
    path = Path(__file__).with_name("invented.py")
    spec = importlib.util.spec_from_file_location("invented", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def study():
    invented = load_invented()
    campaign = invented.small_campaign()
    responses = invented.responses_of(campaign)
    modes = invented.modes_of(campaign, responses)
    plant_set = invented.plant_set_of(modes)
    return SimpleNamespace(
        campaign=campaign,
        responses=responses,
        screening=invented.screening_of(responses),
        modes=modes,
        population=invented.population_of(modes),
        plant_set=plant_set,
        audit=invented.audit_of(plant_set, modes),
    )
