"""Fixtures that several folders of tests share."""

import importlib.util
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

MAKERS = Path(__file__).parent / "plant_set" / "makers.py"


@pytest.fixture(scope="session")
def makers():
    """The makers of small plant sets, loaded by path: tests are not an importable package."""
    spec = importlib.util.spec_from_file_location("plant_set_makers", MAKERS)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def small_set(makers):
    """A set of eight plants with four modes."""
    return makers.small()


@pytest.fixture(scope="session")
def make_family(makers):
    """The maker of families."""
    return makers.family


@pytest.fixture(scope="session")
def bounded_set_file(tmp_path_factory):
    """A set file with an optimal weight, written by another process."""
    path = tmp_path_factory.mktemp("bounded") / "set.json"
    subprocess.run([sys.executable, str(MAKERS), str(path)], check=True)
    return path


@pytest.fixture(scope="session")
def small_results(tmp_path_factory):
    """The results folder of a small invented campaign, run by another process."""
    folder = tmp_path_factory.mktemp("campaign")
    script = MAKERS.with_name("small_study.py")
    subprocess.run([sys.executable, str(script), str(folder)], check=True)
    return folder / "results"


@pytest.fixture(scope="session")
def results_in_form(small_results, tmp_path_factory):
    """Return the results folder of the small campaign bounded in a form."""
    known = {}

    def run(form):
        if form not in known:
            folder = tmp_path_factory.mktemp(form) / "study"
            shutil.copytree(small_results.parent, folder)
            script = MAKERS.with_name("small_study.py")
            subprocess.run([sys.executable, str(script), str(folder), form], check=True)
            known[form] = folder / "results"
        return known[form]

    return run
