"""Coverage: exact where units were held out, plain silence where not."""

import json

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.methods.beta_binomial import BetaShares
from identkit.stages.coverage import state_coverage
from identkit.stages.leave_one_out import LeaveOneOut
from identkit.stages.model_coverage import Check, ModelStatement


def test_without_held_out_units_nothing_is_claimed():
    said = state_coverage()
    assert said["content"] is None
    assert said["units"] == 0
    assert "nothing is claimed about the next unit" in said["sentence"]
    assert "22 for 90 % content at 90 % confidence, 59 for 95 % at 95 %" in said["sentence"]
    assert "no safety certificate" in said["sentence"]
    json.dumps(said, allow_nan=False)


def test_another_wish_is_answered_with_its_own_number():
    assert (
        "299 for the 99 % at 95 % asked for"
        in state_coverage(content=0.99, confidence=0.95)["sentence"]
    )


def test_all_held_is_the_first_order_statement():
    said = state_coverage({f"U{k}": 0.9 for k in range(24)}, content=0.9, confidence=0.95)
    assert said["content"] == pytest.approx(0.05 ** (1.0 / 24.0))
    assert (said["held"], said["units"]) == (24, 24)
    assert "88.3 %" in said["sentence"]
    assert "not reached (29 held-out units" in said["sentence"]
    assert said["assumptions"]


def test_just_enough_units_reach_the_content():
    for units, reached in ((58, False), (59, True)):
        said = state_coverage({str(k): 1.0 for k in range(units)}, content=0.95, confidence=0.95)
        assert (said["content"] >= 0.95) is reached


def test_units_not_held_rejected_or_unknown_count_against_the_set():
    reach = {"U1": 0.5, "U2": 1.2, "U3": float("nan")}
    said = state_coverage(reach, rejected=["U4"])
    assert (said["held"], said["units"]) == (1, 4)
    assert "not held: U2, U3, U4" in said["sentence"]
    assert said["content"] == pytest.approx(1.0 - 0.9 ** (1.0 / 4.0), abs=1e-9)
    assert state_coverage({"U1": 2.0})["content"] == 0.0


def test_lots_may_be_what_is_drawn():
    said = state_coverage({"A": 0.5, "B": 0.6}, exchangeable="lot")
    assert "2 of 2 held-out lots are held" in said["sentence"]


@pytest.mark.parametrize("wrong", [{"content": 1.0}, {"confidence": 0.0}])
def test_impossible_shares_are_refused(wrong):
    with pytest.raises(InputError, match="a share between 0 and 1"):
        state_coverage(**wrong)


def test_the_statement_is_broken_no_more_often_than_it_says():
    # 2000 campaigns: the set's true content is that of the largest of the built-in units, the
    # statement rests on fresh ones; it may be wrong in 10 % of campaigns, +- 2 % (3 sigma).
    rng = np.random.default_rng(12)
    broken = 0
    for _ in range(2000):
        limit = rng.normal(size=20).max()
        fresh = rng.normal(size=22)
        reach = {str(k): float(np.exp(value - limit)) for k, value in enumerate(fresh)}
        content = state_coverage(reach)["content"]
        truth = float(np.mean(rng.normal(size=4000) <= limit))
        broken += truth < content
    assert broken / 2000 < 0.12


def predicted(**checks):
    found = tuple(
        Check(name.replace("_", " "), passed, "chance 0.5") for name, passed in checks.items()
    )
    return ModelStatement(BetaShares(90.0, 10.0), 16, 2400, 12, found)


def test_the_model_speaks_where_nothing_was_held_out_and_its_checks_pass():
    said = state_coverage(model=predicted(units_are_normal=True))
    assert said["content"] == pytest.approx(BetaShares(90.0, 10.0).quantile(0.1))
    assert "virtual units" in said["method"]
    assert any("normal" in line for line in said["assumptions"])
    assert "If the population is as modelled" in said["sentence"]
    assert said["sentence"].count("no safety certificate") == 1


def test_a_model_whose_check_fails_claims_nothing_and_says_why():
    said = state_coverage(model=predicted(units_are_normal=True, lots_are_alike=False))
    assert said["content"] is None
    assert said["model_based"]["trusted"] is False
    assert "must not be trusted" in said["sentence"]
    assert "lots are alike" in said["sentence"]
    assert "units are normal" not in said["sentence"]


def test_held_out_units_go_before_the_model():
    said = state_coverage({"U1": 0.5}, model=predicted(units_are_normal=True))
    assert said["content"] == said["exact"]["content"] == pytest.approx(0.1)
    assert said["units"] == 1


def test_leaving_out_is_called_approximate_and_is_no_claim():
    tried = LeaveOneOut({"U1": 0.9, "U2": 1.1, "U3": float("nan")}, 3, True)
    said = state_coverage(left_out=tried)
    assert (
        "Leaving each unit out in turn, 1 of 3 would have been held (approximate"
        in (said["sentence"])
    )
    assert said["content"] is None
    some = state_coverage(left_out=LeaveOneOut({"U1": 0.9}, 500, False))["leave_one_out"]
    assert "each of 1 units drawn" in some["sentence"]
    assert any("kept" in line for line in some["assumptions"])
