"""The demo, run once from the command line for all tests of this folder."""

import json
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest


@dataclass(frozen=True)
class DemoRun:
    folder: Path
    code: int
    printed: str
    errors: str

    @property
    def results(self):
        return self.folder / "results"

    @property
    def study(self):
        return self.folder / "study.toml"

    def truth(self):
        """True modal parameters by response."""
        text = (self.folder / "truth.json").read_text(encoding="utf-8")
        return {row["response"]: row for row in json.loads(text)["responses"]}


def identkit(*words):
    """Run the command line in a process of its own."""
    command = [sys.executable, "-c", "from identkit.cli import main; main()", *map(str, words)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


@pytest.fixture(scope="session")
def command():
    return identkit


@pytest.fixture(scope="session")
def demo(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo") / "campaign"
    done = identkit("demo", folder, "--quiet")
    return DemoRun(folder, done.returncode, done.stdout, done.stderr)
