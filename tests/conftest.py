"""Fixtures that several folders of tests share."""

import subprocess
import sys
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def bounded_set_file(tmp_path_factory):
    """A set file with an optimal weight, written by another process."""
    path = tmp_path_factory.mktemp("bounded") / "set.json"
    script = Path(__file__).parent / "plant_set" / "makers.py"
    subprocess.run([sys.executable, str(script), str(path)], check=True)
    return path
