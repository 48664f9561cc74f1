"""Assignment against brute force; costs; crossings."""

from itertools import permutations

import numpy as np
import pytest

from identkit.methods.mode_assignment import assign_modes, crossing_modes, pairing_cost


def cheapest(cost, unpaired):
    """Return the least total cost by trying every partial pairing."""
    fitted, population = cost.shape
    best = np.inf
    places = list(range(population)) + [-1] * fitted
    for choice in set(permutations(places, fitted)):
        pairs = sum(cost[i, k] for i, k in enumerate(choice) if k >= 0)
        named = sum(k >= 0 for k in choice)
        best = min(best, pairs + unpaired * (fitted + population - 2 * named))
    return best


@pytest.mark.parametrize("seed", range(8))
def test_no_partial_pairing_is_cheaper(seed):
    rng = np.random.default_rng(seed)
    cost = rng.exponential(8.0, size=(rng.integers(1, 5), rng.integers(1, 5)))
    cost[rng.uniform(size=cost.shape) < 0.2] = np.inf
    found = assign_modes(cost, 6.0)
    named = np.flatnonzero(found >= 0)
    total = cost[named, found[named]].sum() + 6.0 * (sum(cost.shape) - 2 * len(named))
    assert total == pytest.approx(cheapest(cost, 6.0))
    assert len(set(found[named].tolist())) == len(named)


def test_a_pair_dearer_than_two_unpaired_is_not_made():
    assert assign_modes(np.array([[11.9]]), 6.0).tolist() == [0]
    assert assign_modes(np.array([[12.1]]), 6.0).tolist() == [-1]
    assert assign_modes(np.full((2, 2), np.inf), 6.0).tolist() == [-1, -1]


def test_nothing_to_pair_is_fine():
    assert assign_modes(np.zeros((0, 3)), 6.0).tolist() == []
    assert assign_modes(np.zeros((2, 0)), 6.0).tolist() == [-1, -1]


def test_cost_grows_slowly_far_out_and_unknown_quantities_are_free():
    near = pairing_cost(np.array([1.0, np.nan]), np.ones(2))
    assert near == pytest.approx(5.0 * np.log(1.25))
    assert pairing_cost(np.array([6.0]), np.ones(1)) == pytest.approx(11.51, abs=0.01)
    # the same difference, but fitted ten times worse: nearer in errors, still not cheaper at 0
    assert pairing_cost(np.array([0.0]), np.array([10.0])) > pairing_cost(
        np.array([1.0]), np.ones(1)
    )


def test_crossing_modes_names_both_sides():
    assert crossing_modes(np.array([1.0, 2.0, np.nan, 4.0])).tolist() == []
    assert crossing_modes(np.array([1.0, 3.0, 2.0, 4.0])).tolist() == [1, 2]
    assert crossing_modes(np.array([5.0, np.nan, 2.0, 4.0])).tolist() == [0, 2, 3]
