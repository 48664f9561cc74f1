"""The demo's set file re-checked from its text alone, and four tampered copies refused."""

import copy
import json

import pytest

from tests.independent_checker import Checker

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def document(demo):
    return json.loads((demo.results / "set.json").read_text(encoding="utf-8"))


@pytest.fixture
def copied(document):
    return copy.deepcopy(document)


def test_the_file_stands_every_check(document):
    assert Checker(document).run() == []


def test_a_weight_scaled_by_99_percent_is_refused(copied):
    left = copied["weights"]["left"]
    for part in "CD":
        left[part] = [[0.99 * value for value in row] for row in left[part]]
    assert "weight: covers every radius" in Checker(copied).run()


def test_a_mode_moved_by_one_percent_is_refused(copied):
    copied["plants"][0]["modal_parameters"]["modal_frequency"][2] *= 1.01
    assert Checker(copied).run()


def test_an_edited_gap_is_refused(copied):
    copied["certificate"]["optimality"]["gap_db"] -= 0.005
    assert Checker(copied).run() == ["optimality: gap"]


def test_a_deleted_plant_is_refused(copied):
    setters = copied["radii"]["set_by"]
    gone = max(copied["plants"], key=lambda plant: setters.count(plant["response"]))
    copied["plants"].remove(gone)
    assert Checker(copied).run()
