"""Set files re-checked from nothing but their text, and tampered copies that have to be refused.

The checker (`independent_checker`) uses json, numpy and scipy, no line of identkit.
"""

import copy
import json

import numpy as np
import pytest

from tests.independent_checker import FORMS, Checker


@pytest.fixture(scope="module", params=["plain arrays", "campaign", *FORMS[1:]])
def document(request):
    """A set made from plain arrays, and those made by all stages from measured files, by form."""
    if request.param in FORMS:
        path = request.getfixturevalue("results_in_form")(request.param) / "set.json"
    elif request.param == "campaign":
        path = request.getfixturevalue("small_results") / "set.json"
    else:
        path = request.getfixturevalue("bounded_set_file")
    return json.loads(path.read_text(encoding="utf-8"))


def failures(document):
    return Checker(document).run()


def test_the_file_stands_every_check(document):
    assert len(document["plants"]) >= 5
    assert failures(document) == []


def scaled_weight(document, factor):
    changed = copy.deepcopy(document)
    left = changed["weights"]["left"]
    for name in "CD":
        left[name] = (factor * np.asarray(left[name])).tolist()
    return changed


def scale_block_input(document, factor):
    """Scale what Delta sends into the interconnection: the weight on its left."""
    for name in "BD":
        for row in document["interconnection"][name]:
            row[0] *= factor


def test_a_weight_scaled_by_99_percent_is_refused(document):
    found = failures(scaled_weight(document, 0.99))
    assert "weight: covers every radius" in found
    assert any(item.startswith("reach:") and item.endswith("is held") for item in found)


def test_a_weight_scaled_everywhere_in_the_file_is_still_refused(document):
    """Interconnection, magnitudes and stored reach made to fit: only the physics is left."""
    changed = scaled_weight(document, 0.99)
    scale_block_input(changed, 0.99)
    changed["radii"]["weight_magnitude"] = [
        0.99 * value for value in changed["radii"]["weight_magnitude"]
    ]
    for plant in changed["plants"]:
        plant["reach"]["value"] /= 0.99
    found = failures(changed)
    assert not any(item.startswith(("interconnection", "weight: magnitude")) for item in found)
    assert "weight: covers every radius" in found


def every_plant(document):
    return range(len(document["plants"]))


def test_one_mode_moved_by_one_percent_is_refused(document):
    excluded = {item["label"] for item in document["certificate"]["measured"]["excluded"]}
    for index in every_plant(document):
        # Far from any minimum of P0 an absolute error need not be largest near its own mode.
        if document["form"] == "additive" and document["plants"][index]["response"] in excluded:
            continue
        for mode in range(len(document["plants"][index]["modal_parameters"]["modal_frequency"])):
            changed = copy.deepcopy(document)
            plant = changed["plants"][index]
            plant["modal_parameters"]["modal_frequency"][mode] *= 1.01
            checker = Checker(changed)
            checker.check_radii()
            value = checker.reach(plant)
            off = abs(value - plant["reach"]["value"]) > 1e-5 * value
            assert checker.failures or off, (plant["response"], mode)


def test_the_whole_check_refuses_a_moved_mode(document):
    changed = copy.deepcopy(document)
    changed["plants"][0]["modal_parameters"]["modal_frequency"][0] *= 1.01
    assert failures(changed)


@pytest.mark.parametrize("change", [-0.005, 0.05, 1.0])
def test_an_edited_gap_is_refused(document, change):
    changed = copy.deepcopy(document)
    changed["certificate"]["optimality"]["gap_db"] += change
    assert failures(changed) == ["optimality: gap"]


def test_an_edited_gap_with_floor_and_excess_to_fit_is_refused(document):
    for names in (("floor_db", -1.0), ("excess_db", 1.0)):
        changed = copy.deepcopy(document)
        best = changed["certificate"]["optimality"]
        best["gap_db"] += 0.5
        best[names[0]] += names[1] * 0.5
        found = failures(changed)
        # A lower floor is a weaker claim and true; a larger excess is not what the weight has.
        assert found == ([] if names[0] == "floor_db" else ["optimality: excess"])


def test_a_loose_weight_with_a_claimed_gap_of_nothing_is_refused(document):
    """Everything made consistent with a weight 10 % too large, but the floor is not a floor."""
    changed = scaled_weight(document, 1.1)
    more = 20 * np.log10(1.1)
    scale_block_input(changed, 1.1)
    changed["radii"]["weight_magnitude"] = [1.1 * v for v in changed["radii"]["weight_magnitude"]]
    for plant in changed["plants"]:
        plant["reach"]["value"] /= 1.1
    for name in ("excess_db", "floor_db"):
        changed["certificate"]["optimality"][name] += more
    assert failures(changed) == ["optimality: floor is a floor"]


def test_a_deleted_plant_is_refused(document):
    setters = set(document["radii"]["set_by"])
    for index in every_plant(document):
        changed = copy.deepcopy(document)
        gone = changed["plants"].pop(index)["response"]
        checker = Checker(changed)
        checker.check_radii()
        assert gone not in setters or checker.failures


def test_a_plant_deleted_with_its_name_is_refused(document):
    """Its name taken out of the radii too: the radii stand above the floor without anybody."""
    changed = copy.deepcopy(document)
    gone = max(
        changed["plants"], key=lambda plant: document["radii"]["set_by"].count(plant["response"])
    )
    changed["plants"].remove(gone)
    changed["radii"]["set_by"] = [
        "" if name == gone["response"] else name for name in changed["radii"]["set_by"]
    ]
    changed["certificate"]["measured"]["setting"] -= 1
    assert "radii: floor" in failures(changed)
