"""Watching production from the command line, on the demo's own results."""

import re

import pandas as pd
import pytest

from identkit.grids import load, save

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def watched(demo, command, tmp_path_factory):
    history = tmp_path_factory.mktemp("quality") / "line-4.db"
    return history, command("drift", history, demo.results)


def test_the_odd_lot_is_a_signal(watched):
    history, done = watched
    assert done.returncode == 1, done.stderr
    assert done.stderr == ""
    first = done.stdout.splitlines()[0]
    assert first.startswith("Signal: ")
    assert "M3" in first
    assert "still holds every unit" in first
    assert re.search(r"M3 modal frequency moved up by 1\d\d ± \d+ Hz", done.stdout)
    assert "since unit U14 (2026-04-06)" in done.stdout
    assert "lot C" in done.stdout


def test_only_the_third_mode_moved(watched):
    table = pd.read_csv(watched[0].with_name("line-4-drift") / "drift_signals.csv")
    assert set(table["mode"]) == {"M3"}
    assert {"modal_frequency", "residue"} <= set(table["quantity"])
    assert set(table["lot"]) == {"C"}


def test_every_unit_but_the_cracked_one_is_in_the_table(watched):
    table = pd.read_csv(watched[0].with_name("line-4-drift") / "drift.csv")
    assert table["unit"].nunique() == 23
    assert "U13" not in set(table["unit"])
    frequency = table[(table["quantity"] == "modal_frequency") & (table["mode"] == "M3")]
    assert frequency["value"].between(4600.0, 5100.0).all()


def test_the_page_puts_the_verdict_first_and_needs_nothing_from_outside(watched):
    page = (watched[0].with_name("line-4-drift") / "drift.html").read_text(encoding="utf-8")
    assert page.index('id="verdict"') < page.index('id="act"') < page.index('id="charts"')
    assert "U13" in page
    assert "cracked arm" in page
    assert not re.search(r'(src|href)="(https?:)?//', page)
    assert "cautions" in page


def test_a_repeat_is_refused_and_changes_nothing(watched, demo, command):
    history, _ = watched
    before = history.read_bytes()
    done = command("drift", history, demo.results)
    assert done.returncode == 2
    assert "nothing was added" in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1
    assert history.read_bytes() == before


def test_a_quiet_week_after_the_odd_lot_ends_well(watched, demo, command, tmp_path):
    """The last lot's measurements under new names: a week in which nothing happens."""
    modes = load(demo.results / "modes.nc")
    chosen = [k for k, lot in enumerate(modes["lot"].values) if str(lot) == "D"]
    later = modes.isel(response=chosen)
    count = len(chosen)
    later = later.assign_coords(
        response=[f"week-20/{name}" for name in later["response"].values],
        unit=("response", [f"X{str(name)[1:]}" for name in later["unit"].values]),
        lot=("response", ["E"] * count),
        measured_at=("response", ["2026-05-04"] * count),
    )
    folder = tmp_path / "results"
    folder.mkdir()
    save(later, folder / "modes.nc")
    save(load(demo.results / "population.nc"), folder / "population.nc")
    done = command("drift", watched[0], folder)
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stdout.startswith("No signal: Nothing moved beyond chance in what was added")


def test_wrong_rules_are_one_sentence(command, tmp_path):
    done = command("drift", tmp_path / "h.db", "--baseline", "2")
    assert done.returncode == 2
    assert "expected at least 5 units" in done.stderr
    done = command("drift", tmp_path / "h.db")
    assert done.returncode == 2
    assert "an empty history" in done.stderr
