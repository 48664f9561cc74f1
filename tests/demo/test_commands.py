"""The other commands on the demo's results."""

import json
import shutil

import pytest

pytestmark = pytest.mark.slow


def test_show_tells_what_a_set_claims(demo, command):
    done = command("show", demo.results / "set.json")
    assert done.returncode == 0
    assert "Holds 274 of 274" in done.stdout
    assert "cracked arm" in done.stdout


def test_show_tells_the_same_of_both_set_files(demo, command):
    first, second = (
        command("show", demo.results / name).stdout.splitlines() for name in ("set.json", "set.h5")
    )
    differing = [a for a, b in zip(first[1:], second[1:], strict=True) if a != b]
    assert all(line.startswith("Plants listed here") for line in differing)


@pytest.mark.parametrize("name", ["responses.nc", "modes.nc", "population.nc"])
def test_show_explains_every_variable(demo, command, name):
    done = command("show", demo.results / name)
    assert done.returncode == 0
    listed = [line for line in done.stdout.splitlines() if line.startswith("  ")]
    assert listed
    assert all(line.rstrip().endswith((".", "]")) for line in listed)


def test_audit_holds_the_campaign_it_was_built_from(demo, command):
    done = command("audit", demo.results / "set.json", demo.results)
    assert done.returncode == 0, done.stdout
    assert "Answer: held." in done.stdout


def test_audit_says_no_to_the_cracked_unit(demo, command):
    cracked = sorted(demo.folder.glob("bench/*/U13_*.csv"))[0]
    done = command("audit", demo.results / "set.json", cracked, "--study", demo.study)
    assert done.returncode == 1
    assert "Answer: not held." in done.stdout
    assert "cracked arm" in done.stdout


def test_audit_rejects_a_weight_that_was_touched(demo, command, tmp_path):
    document = json.loads((demo.results / "set.json").read_text(encoding="utf-8"))
    weight = document["weights"]["left"]
    for part in ("C", "D"):
        weight[part] = [[0.99 * value for value in row] for row in weight[part]]
    touched = tmp_path / "touched.json"
    touched.write_text(json.dumps(document), encoding="utf-8")
    done = command("audit", touched, demo.results)
    assert done.returncode == 1


def test_new_writes_a_study_once(command, tmp_path):
    first = command("new", tmp_path / "mine")
    again = command("new", tmp_path / "mine")
    assert (first.returncode, again.returncode) == (0, 2)
    assert (tmp_path / "mine" / "study.toml").is_file()
    assert len(again.stderr.strip().splitlines()) == 1


def test_a_changed_order_redoes_the_bound_and_what_follows_only(demo, command, tmp_path):
    copy = tmp_path / "copy"
    shutil.copytree(demo.folder, copy)
    study = copy / "study.toml"
    text = study.read_text(encoding="utf-8")
    study.write_text(text.replace('order = "auto"', "order = 6"), encoding="utf-8")
    log = copy / "results" / "identkit.log"
    before = log.read_text(encoding="utf-8")
    done = command("run", study, "--quiet")
    assert done.returncode == 0, done.stderr
    new = log.read_text(encoding="utf-8")[len(before) :]
    started = [line.split()[-2].rstrip(":") for line in new.splitlines() if "start" in line]
    assert started == ["bound", "coverage", "audit", "export", "report"]
    assert "Weight of order 6" in done.stdout
