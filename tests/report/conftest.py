"""One small invented study, and the report written from it."""

import importlib.util
from pathlib import Path
from types import SimpleNamespace

import pytest

from identkit.report.page import ReportInput, write_report


def load_invented():
    path = Path(__file__).parents[1] / "figures" / "invented.py"
    spec = importlib.util.spec_from_file_location("invented", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def invented():
    return load_invented()


@pytest.fixture(scope="session")
def given(invented):
    campaign = invented.small_campaign()
    responses = invented.responses_of(campaign)
    modes = invented.modes_of(campaign, responses)
    names = responses["response"].values.astype(str)
    excluded = [(name, "unit U06: dropped on the floor") for name in names[-4:]]
    plant_set = invented.plant_set_of(modes, excluded=excluded)
    return ReportInput(
        study_name="small-study",
        responses=responses.assign_attrs(
            skipped_files='[{"file": "bench/U01_H0.csv", "reason": "line 3: found a word"}]'
        ),
        screening=invented.screening_of(responses),
        fits=modes,
        modes=modes,
        population=invented.population_of(modes),
        plant_set=plant_set,
        audit=invented.audit_of(plant_set, modes),
        coverage={"sentence": "Nothing is claimed about the next unit."},
        run={
            "python": "3.11",
            "libraries": {"numpy": "2.0"},
            "stages": {"fit": {"seconds": 1.25}},
            "inputs": {"bench/U01_H0.csv": {"sha256": "ab" * 32}},
        },
    )


@pytest.fixture(scope="session")
def written(given, tmp_path_factory):
    folder = tmp_path_factory.mktemp("results")
    page = write_report(given, folder)
    return SimpleNamespace(folder=folder, page=page, text=page.read_text(encoding="utf-8"))
