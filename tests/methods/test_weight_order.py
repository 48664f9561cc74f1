import numpy as np
import pytest

from identkit.errors import InfeasibleError
from identkit.methods.weight_order import choose_order


def delay_radius(frequency):
    return np.maximum(0.02, 2.0 * np.sin(np.minimum(frequency * 2e-4, np.pi) / 2.0))


def test_trade_off_is_certified_and_the_rule_chooses_the_least_priced():
    frequency = np.geomspace(10.0, 2e4, 400)
    choice = choose_order(frequency, delay_radius(frequency), max_order=8)
    assert [weight.order for weight in choice.weights] == [0, 1, 2, 3, 4, 6, 8]
    assert max(weight.gap_db for weight in choice.weights) <= 0.02
    excess = np.array([weight.excess_db for weight in choice.weights])
    assert np.all(np.diff(excess) <= 0.02)
    for weight in choice.weights:
        saved = choice.chosen.excess_db - weight.excess_db
        assert saved <= 0.5 * (weight.order - choice.chosen.order) + 1e-9
    assert choice.rule.startswith(f"order {choice.chosen.order}: least excess + 0.5 dB per order")


def test_price_moves_the_choice():
    frequency = np.geomspace(10.0, 2e4, 200)
    dear = choose_order(frequency, delay_radius(frequency), max_order=6, price_db=10.0)
    cheap = choose_order(frequency, delay_radius(frequency), max_order=6, price_db=0.001)
    assert dear.chosen.order < cheap.chosen.order
    assert "highest order tried" in cheap.rule


def test_few_points_lower_the_highest_order():
    frequency = np.array([1.0, 2.0, 4.0, 8.0, 16.0])
    choice = choose_order(frequency, np.array([0.1, 0.2, 0.3, 0.2, 0.1]), max_order=12)
    assert choice.weights[-1].order == 2


def test_orders_that_break_the_cap_are_missing():
    frequency = np.geomspace(10.0, 2e4, 200)
    radius = delay_radius(frequency)
    choice = choose_order(frequency, radius, cap=1.3 * radius, max_order=4)
    assert [weight.order for weight in choice.weights] == [2, 3, 4]
    with pytest.raises(InfeasibleError, match="order 1"):
        choose_order(frequency, radius, cap=1.02 * radius, max_order=1)
