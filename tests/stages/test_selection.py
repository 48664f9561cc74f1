"""Responses leave the bound by the settings only, and hold-out draws whole units."""

import pytest

from identkit.errors import InputError
from identkit.stages.coverage import largest_reach_by_group
from identkit.stages.screen import screen
from identkit.stages.selection import held_out, left_out
from identkit.synthetic import InventedBench, Story, invent_campaign, to_dataset


@pytest.fixture(scope="module")
def responses():
    bench = InventedBench(points=200)
    campaign = invent_campaign(units=8, heads=2, temperatures=(25.0,), bench=bench, story=Story())
    return to_dataset(campaign)


@pytest.fixture(scope="module")
def screening(responses):
    return screen(responses)


def test_a_rule_needs_all_its_labels(responses, screening):
    reasons = left_out(responses, screening, exclude=[({"unit": "U03", "head": "1"}, "bent")])
    assert [name.split("/")[1] for name in reasons] == ["U03_H1_25C"]
    assert set(reasons.values()) == {"unit U03, head 1: bent"}


def test_a_number_matches_a_numeric_label(responses, screening):
    assert len(left_out(responses, screening, exclude=[({"temperature": 25}, "")])) == 16


@pytest.mark.parametrize(
    ("labels", "words"),
    [({"unit": "U99"}, "no such response"), ({"colour": "red"}, 'label "colour"')],
)
def test_a_rule_that_matches_nothing_is_refused(responses, screening, labels, words):
    with pytest.raises(InputError, match=words):
        left_out(responses, screening, exclude=[(labels, "")])


def test_hold_out_draws_whole_units_and_repeats_itself(responses):
    drawn = held_out(responses, {}, share=0.25, seed=4)
    assert drawn == held_out(responses, {}, share=0.25, seed=4)
    assert len(set(drawn.values())) == 2
    assert len(drawn) == 4


def test_hold_out_leaves_alone_what_is_left_out_already(responses, screening):
    gone = left_out(responses, screening, exclude=[({"unit": "U02"}, "")])
    for seed in range(20):
        assert "U02" not in held_out(responses, gone, share=0.5, seed=seed).values()


def test_hold_out_by_lot(responses):
    assert len(set(held_out(responses, {}, share=0.25, seed=1, by="lot").values())) == 1


@pytest.mark.parametrize("share", [0.01, 0.9])
def test_hold_out_that_leaves_too_few_is_refused(responses, share):
    with pytest.raises(InputError, match="hold_out"):
        held_out(responses, {}, share=share, seed=1)


def test_a_response_without_a_plant_counts_as_infinitely_far():
    assert largest_reach_by_group([], {"r1": "U1"}) == {"U1": float("inf")}
