"""How commands end: 2 for wrong input in one sentence, 3 for a fault with its traceback kept."""

import re
from pathlib import Path

import pytest

from identkit import pipeline
from identkit.cli import main


def ending(arguments):
    with pytest.raises(SystemExit) as stop:
        main(arguments)
    return stop.value.code


def test_unknown_commands_and_options_are_wrong_input():
    assert ending(["frobnicate"]) == 2
    assert ending(["run", "--sideways"]) == 2


def test_help_ends_well():
    assert ending(["--help"]) == 0


def test_a_fault_keeps_its_traceback_in_a_file(monkeypatch, capsys, tmp_path):
    def broken(*arguments, **options):
        raise RuntimeError("a fault of our own")

    monkeypatch.setattr(pipeline, "run_study", broken)
    assert ending(["run", str(tmp_path / "study.toml")]) == 3
    said = capsys.readouterr().err
    assert "Traceback" not in said
    log = Path(re.search(r"the traceback is in (\S+)", said).group(1))
    assert "a fault of our own" in log.read_text(encoding="utf-8")
    log.unlink()


def test_ctrl_c_says_how_to_go_on(monkeypatch, capsys, tmp_path):
    def stopped(*arguments, **options):
        raise KeyboardInterrupt

    monkeypatch.setattr(pipeline, "run_study", stopped)
    assert ending(["run", str(tmp_path / "study.toml")]) == 130
    assert "run the same command again" in capsys.readouterr().err
