"""Fixtures made by the makers of small plant sets."""

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import pytest

PATH = Path(__file__).parents[1] / "plant_set" / "makers.py"


def load_makers() -> ModuleType:
    """Load the makers by path: tests are not an importable package."""
    spec = importlib.util.spec_from_file_location("plant_set_makers", PATH)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def makers():
    """The module of makers."""
    return load_makers()


@pytest.fixture(scope="session")
def small_set(makers):
    """A set of eight plants with four modes."""
    return makers.small()


@pytest.fixture(scope="session")
def make_family(makers):
    """The maker of families."""
    return makers.family
