"""The demo from files to report: what it prints, finds, holds, and redoes."""

import json
import re

import numpy as np
import pandas as pd
import pytest

from identkit.grids import load

pytestmark = pytest.mark.slow


def test_it_ends_well_and_prints_only_what_matters(demo):
    assert demo.code == 0, demo.errors
    assert demo.errors == ""
    assert len(demo.printed.splitlines()) <= 12


def test_the_verdict_names_what_was_left_out_and_why(demo):
    assert "3 files skipped" in demo.printed
    assert "U13" in demo.printed
    assert "cracked arm" in demo.printed


def test_the_report_is_where_the_verdict_says(demo):
    page = re.search(r"Report: (.+)", demo.printed).group(1)
    assert (demo.results / "report.html").samefile(page)


def test_every_used_response_is_held(demo):
    table = pd.read_csv(demo.results / "audit.csv")
    used = table[~table["excluded"]]
    assert len(used) == 274
    assert (used["fit_reach"] <= 1 + 1e-6).all()
    assert not (used["verdict"] == "not held").any()


def test_the_weight_is_within_its_stated_gap(demo):
    certificate = json.loads((demo.results / "certificate.json").read_text())["certificate"]
    optimality = certificate["optimality"]
    assert optimality["gap_db"] == pytest.approx(
        optimality["excess_db"] - optimality["floor_db"], abs=1e-9
    )
    assert optimality["gap_db"] <= 0.02


def test_significant_modes_are_found(demo):
    """Modes whose true significance is above 7 are found, within five standard errors."""
    modes, truth = load(demo.results / "modes.nc"), demo.truth()
    frequency = modes["modal_frequency"].values
    error = modes["modal_frequency_standard_error"].values
    found = wanted = 0
    for row, name in enumerate(modes["response"].values):
        plant = truth[str(name)]["plant"]
        for true in plant["modal_frequency"]:
            miss = np.abs(frequency[row] - true)
            wanted += 1
            found += bool(np.nanmin(miss / np.maximum(error[row], 1e-12)) < 5.0)
    assert found / wanted >= 0.98


def test_errors_of_modal_frequency_are_as_stated(demo):
    modes, truth = load(demo.results / "modes.nc"), demo.truth()
    healthy = modes.isel(response=modes["unit"].values != "U13")
    scaled = [
        (healthy["modal_frequency"].values[row, :8] - truth[str(name)]["plant"]["modal_frequency"])
        / healthy["modal_frequency_standard_error"].values[row, :8]
        for row, name in enumerate(healthy["response"].values)
    ]
    inside = np.mean(np.abs(scaled) < 1.96)
    assert 0.94 <= inside <= 0.96


def test_the_odd_lot_shows_in_its_third_mode(demo):
    table = pd.read_csv(demo.results / "modes.csv", dtype={"unit": str})
    third = table[(table["mode"] == "M3") & (table["unit"] != "U13")]
    mean = third.groupby("lot")["modal_frequency_hz"].mean()
    assert mean["C"] > 1.02 * mean.drop("C").max()


def test_population_is_that_of_the_invention(demo):
    """Temperature slopes of all modes within four standard errors of the invented ones."""
    from identkit.synthetic import MODES

    population = load(demo.results / "population.nc").sel(quantity="modal_frequency")
    slope = population["temperature_slope"].values
    error = population["temperature_slope_standard_error"].values
    true = np.array([mode.frequency_slope for mode in MODES])
    # a relative change of b per K about 25 degC is a slope of log frequency of b to first order;
    # the second-order part b^2 T / 2 is below 4e-6 per K for these modes
    assert np.all(np.abs(slope - true) <= 4 * error + 4e-6)


def stages_run(demo):
    log = (demo.results / "identkit.log").read_text(encoding="utf-8")
    return re.findall(r"INFO (\w+): start", log)


def test_a_second_run_does_nothing_again(demo, command):
    before = stages_run(demo)
    done = command("run", demo.study, "--quiet")
    assert done.returncode == 0, done.stderr
    assert stages_run(demo) == before
    assert done.stdout.splitlines()[0] == demo.printed.splitlines()[0]


def test_the_verdict_names_the_odd_lot(demo):
    assert re.search(r"lot C in M3 frequency \+\d", demo.printed)
    assert not re.search(r"lot [ABD] in", demo.printed)
