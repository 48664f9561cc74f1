"""Planning a measurement from a first one, and whether the plan comes true."""

from importlib.resources import files

import numpy as np
import pytest

from identkit.cli import main
from identkit.excitation import plan_excitation
from identkit.grids import load
from identkit.methods.measurement_planning import line_spacing, needed_gain, relative_deviation
from identkit.methods.modal_model import ModalParameters
from identkit.pipeline import run_study
from identkit.synthetic_record_files import invent_bench_campaign, write_records
from identkit.synthetic_records import InventedRecorder


def test_the_gain_is_that_of_the_worst_known_error():
    assert needed_gain(np.array([1e-4, 3e-4, np.nan]), 1e-4) == pytest.approx(9.0)
    assert np.isnan(needed_gain(np.array([np.nan]), 1.0))


def test_line_spacing_follows_the_narrowest_resonance():
    assert line_spacing(np.array([1000.0, 9000.0]), np.array([0.02, 0.01])) == pytest.approx(5.0)


def test_deviation_of_a_response_known_but_for_its_gain():
    one = ModalParameters(*(np.array([v]) for v in (100.0, 0.01, 4.0, 0.0)), "none")
    covariance = np.zeros((5, 5))
    covariance[4, 4] = 0.04**2  # residue known to one per cent
    found = relative_deviation(np.array([10.0, 100.0, 500.0]), one, covariance, general=False)
    np.testing.assert_allclose(found, 0.01)


def study_of(folder, periods):
    recorder = InventedRecorder(periods=periods)
    write_records(
        folder, invent_bench_campaign(units=2, heads=1), recorder=recorder, bad_files=False
    )
    study = folder / "study.toml"
    study.write_text(
        files("identkit").joinpath("demo_records_study.toml").read_text(encoding="utf-8"),
        encoding="utf-8",
    )
    run_study(study, until="pair", jobs=1)
    return study


@pytest.mark.slow
def test_a_plan_comes_true(tmp_path, capsys):
    """Errors planned from 8 periods are reached with as many times 8 as the plan asks."""
    study = study_of(tmp_path / "first", 9)
    modes = load(study.parent / "results" / "modes.nc")
    now = np.nanmedian(
        modes["modal_frequency_standard_error"] / modes["modal_frequency"], axis=0
    ).max()
    plan = plan_excitation(study, frequency=now / np.sqrt(3.0), damping=1.0, radius=1.0)
    assert plan.gain == pytest.approx(3.0)
    longer = load(
        study_of(tmp_path / "longer", 1 + round(8 * plan.gain)).parent / "results/modes.nc"
    )
    then = np.nanmedian(
        longer["modal_frequency_standard_error"] / longer["modal_frequency"], axis=0
    ).max()
    assert then == pytest.approx(now / np.sqrt(3.0), rel=0.15)
    assert 1.0 < plan.amplitude < 3.0
    assert "no safety certificate" in plan.sentences[-1]
    lines = plan.file.read_text(encoding="utf-8").splitlines()
    signal = np.array([float(line) for line in lines[4:]])
    assert lines[3] == "excitation"
    assert np.sqrt(np.mean(signal**2)) == pytest.approx(1.0, rel=1e-6)
    stated = float(lines[1].split("crest factor ")[1].split(";")[0])
    assert np.abs(signal).max() == pytest.approx(stated, rel=1e-3)
    with pytest.raises(SystemExit) as left:
        main(["plan", str(study)])
    assert left.value.code == 0
    assert "times the information" in capsys.readouterr().out


def test_a_study_that_was_not_run_is_said(tmp_path, capsys):
    study = tmp_path / "study.toml"
    study.write_text('[responses]\nfiles = "{unit}.csv"\n', encoding="utf-8")
    with pytest.raises(SystemExit) as left:
        main(["plan", str(study)])
    assert left.value.code == 2
    assert "run the pair stage first" in capsys.readouterr().err
