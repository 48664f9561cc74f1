"""Check and compare on the demo's set, from the command line and from Python."""

import json
import re

import numpy as np
import pytest

from identkit.controller import controller_from, read_controller
from identkit.controller_check import check_controller
from identkit.grids import load
from identkit.methods.state_space import frequency_response
from identkit.plant_set.files import load_set
from identkit.set_price import price_of_set

pytestmark = pytest.mark.slow


def write_controller(plant_set, folder, crossover):
    """Integrator, lead and roll-off of the designer, |L| = 1 at the crossover (Hz)."""
    w = 2 * np.pi * crossover
    content = {
        "zeros": [-w / 10, -w / 3],
        "poles": [0.0, -3 * w, [-2.83 * w, 2.83 * w], [-2.83 * w, -2.83 * w]],
        "gain": 1.0,
    }
    at = np.array([crossover])
    raw = frequency_response(controller_from(content).system, at)[0, 0, 0]
    content["gain"] = 1.0 / float(abs(plant_set.frequency_response(at)[0, 0, 0] * raw))
    path = folder / f"crossover-{crossover:g}.json"
    path.write_text(json.dumps(content), encoding="utf-8")
    return path


def test_a_slow_controller_holds_every_plant(demo, command, tmp_path):
    plant_set = load_set(demo.results / "set.h5")
    slow = write_controller(plant_set, tmp_path, 300.0)
    picture = tmp_path / "loop.svg"
    done = command("check", demo.results / "set.h5", slow, "--figure", picture)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "Listed plants: 274 of 274 stable" in done.stdout
    assert "Virtual plants: 100 of 100 stable" in done.stdout
    assert "Answer: every plant of the set is stabilised." in done.stdout
    drawn = picture.read_text(encoding="utf-8")
    assert drawn.startswith("<?xml")
    assert "1/|W|" in drawn


def test_a_fast_controller_loses_robustness_where_the_modes_are(demo, command, tmp_path):
    plant_set = load_set(demo.results / "set.json")
    fast = write_controller(plant_set, tmp_path, 1000.0)
    done = command("check", demo.results / "set.json", fast)
    assert done.returncode == 1
    assert "Robust stability: LOST" in done.stdout
    assert re.search(r"lost from .* near the nominal's resonance M\d", done.stdout)
    assert "robustness is lost" in done.stdout
    check = check_controller(plant_set, read_controller(fast))
    assert not check.virtual.stable.all()


def test_the_allowed_loop_is_robust_to_just_there(demo):
    """The yardstick's own T against the set's weight: |W T| reaches 1 and no more."""
    plant_set = load_set(demo.results / "set.json")
    price = price_of_set(plant_set)
    fine = np.geomspace(1.0, 1e6, 200_001)
    weight = frequency_response_of(plant_set.weights.left, fine)
    x = fine / price.bandwidth.natural_frequency
    assert np.abs(weight / (1 - x**2 + 1j * np.sqrt(2) * x)).max() == pytest.approx(1.0, abs=1e-5)
    assert 0.0 < price.bandwidth.crossover < price.bandwidth.natural_frequency


def frequency_response_of(matrices, frequency):
    from identkit.methods.state_space import StateSpace

    system = StateSpace(matrices.A, matrices.B, matrices.C, matrices.D)
    return frequency_response(system, frequency)[:, 0, 0]


def test_both_set_files_contain_each_other(demo, command, tmp_path):
    picture = tmp_path / "both.png"
    done = command(
        "compare", demo.results / "set.json", demo.results / "set.h5", "--figure", picture
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "Answer: each contains the other." in done.stdout
    assert picture.read_bytes()[:4] == b"\x89PNG"


def test_a_wider_weight_contains_and_a_moved_nominal_does_not(demo, command, tmp_path):
    original = demo.results / "set.json"
    document = json.loads(original.read_text(encoding="utf-8"))
    for name, part, factor in (("wider", ("weights", "left"), 1.1), ("moved", ("nominal",), 1.2)):
        changed = json.loads(json.dumps(document))
        target = changed
        for key in part:
            target = target[key]
        for key in ("C", "D"):
            target[key] = [[factor * value for value in row] for row in target[key]]
        (tmp_path / f"{name}.json").write_text(json.dumps(changed), encoding="utf-8")
    wider = command("compare", tmp_path / "wider.json", original)
    assert wider.returncode == 0, wider.stderr
    assert "Answer: A contains B." in wider.stdout
    assert "reach of the whole set 0.909" in wider.stdout
    moved = command("compare", original, tmp_path / "moved.json")
    assert moved.returncode == 1
    assert "Answer: neither contains the other." in moved.stdout


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("check", "SET", "none.json"), "no such file"),
        (("check", "none.json", "none.json"), "none.json"),
        (("check", "SET", "SET"), "A, B, C, D or zeros, poles, gain"),
        (("check", "SET", "none.json", "--figure", "loop.pdf"), ".svg or .png"),
        (("compare", "SET", "none.json"), "none.json"),
    ],
)
def test_wrong_words_end_with_one_sentence(demo, command, words, said):
    place = str(demo.results / "set.json")
    done = command(*(place if word == "SET" else word for word in words))
    assert done.returncode == 2
    assert said in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1


def test_the_price_stands_in_verdict_file_and_report(demo, command):
    assert re.search(r"can reach .* crossover with this set", demo.printed)
    table = load(demo.results / "price.nc")
    assert (
        float(table["allowed_crossover"][0])
        >= price_of_set(load_set(demo.results / "set.json")).bandwidth.crossover
    )
    assert "What the set costs" in (demo.results / "report.html").read_text(encoding="utf-8")
    shown = command("show", demo.results / "price.nc")
    assert "Crossover the remaining radius allows at most" in shown.stdout
