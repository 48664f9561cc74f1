"""Sets compared with themselves scaled, with others, and disc by disc."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set.reach import Surroundings
from identkit.plant_set.schur import plant_matrices
from identkit.set_comparison import compare_sets, containment, reach_of_set

GRID = np.geomspace(50.0, 20_000.0, 80)


def scaled(plant_set, factor):
    """The same set with its weight scaled."""
    left = plant_set.weights.left
    left = f.Matrices(left.A, left.B, factor * left.C, factor * left.D)
    return replace(plant_set, weights=f.Weights(left, plant_set.weights.right))


def with_gain(plant_set, factor):
    """The same set with its nominal's gain scaled."""
    n = plant_set.nominal
    return replace(plant_set, nominal=f.Nominal(n.A, n.B, factor * n.C, factor * n.D))


def test_a_set_contains_itself_and_its_smaller_copy(small_set):
    same = compare_sets(small_set, small_set)
    assert same.b_in_a.holds
    assert same.a_in_b.holds
    assert same.b_in_a.outside == ()
    smaller = compare_sets(small_set, scaled(small_set, 0.8))
    assert smaller.b_in_a.reach == pytest.approx(0.8, rel=1e-9)
    assert smaller.a_in_b.reach == pytest.approx(1.25, rel=1e-9)
    assert smaller.holds
    assert not smaller.a_in_b.holds


def test_a_shifted_gain_by_hand(small_set):
    """P0B = g P0A: |g - 1| + g W over W is largest where W is least."""
    other = with_gain(small_set, 1.02)
    found = compare_sets(small_set, other)
    around = Surroundings(small_set)
    weight = np.abs(around.at(around.common_grid)[1][:, 0, 0])
    assert found.b_in_a.reach == pytest.approx(1.02 + 0.02 / weight.min(), rel=1e-9)
    assert found.a_in_b.reach == pytest.approx((1.0 + 0.02 / weight.min()) / 1.02, rel=1e-9)
    assert not found.holds
    assert found.b_in_a.outside == ((50.0, 20_000.0),)


def discs(around, angles):
    """Points on the rim of every disc of P, (points, angles)."""
    nominal, left, right = (part[:, 0, 0][:, None] for part in around.at(GRID))
    turned = left * right * np.exp(1j * angles)
    if around.form == "additive":
        return nominal + turned
    if around.form == "inverse-multiplicative":
        return nominal / (1 + turned)
    return nominal * (1 + turned)


@pytest.mark.parametrize("outer", ["additive", "multiplicative", "inverse-multiplicative"])
@pytest.mark.parametrize("inner", ["additive", "multiplicative", "inverse-multiplicative"])
def test_reach_of_a_set_is_the_largest_over_its_rim(small_set, outer, inner):
    """Every form in every other, against the reach of 2000 plants on the rim of the inner disc."""
    first = Surroundings(replace(small_set, form=outer))
    shrunk = replace(with_gain(scaled(small_set, 0.02), 1.01), form=inner)
    second = Surroundings(shrunk)
    ours = reach_of_set(first, second, GRID)
    rim = discs(second, np.linspace(0, 2 * np.pi, 2000, endpoint=False))
    # additive radii are in units of the plant: where they hold the origin, 1/P has no bound
    whole = np.isfinite(ours)
    sampled = np.array(
        [first.reach_at(GRID, rim[:, k][:, None, None]) for k in range(0, rim.shape[1])]
    ).max(axis=0)
    assert whole.any() or (inner, outer) == ("additive", "inverse-multiplicative")
    assert np.all(ours[whole] >= sampled[whole] * (1 - 1e-9))
    np.testing.assert_allclose(ours[whole], sampled[whole], rtol=1e-4)


def test_members_of_a_contained_set_are_held(small_set):
    inner = scaled(small_set, 0.9)
    found = compare_sets(small_set, inner)
    assert found.b_in_a.holds
    rim = discs(Surroundings(inner), np.linspace(0, 2 * np.pi, 7))
    for k in range(rim.shape[1]):
        assert small_set.reach_of_response(GRID, rim[:, k]).value[0] <= 1.0


def test_listed_plants_and_units_beyond(small_set):
    found = compare_sets(scaled(small_set, 0.5), small_set)
    assert found.listed_b.value.max() == pytest.approx(2.0, rel=1e-6)
    assert found.listed_a.value.max() == pytest.approx(1.0, rel=1e-6)
    assert set(found.listed_b.units) == {"U0", "U1", "U2", "U3"}
    assert found.new_units == ()


def test_resonances_are_paired_and_shifts_found(small_set, makers):
    plants = makers.family(8)
    moved = makers.nominal_plant()
    moved = replace(moved, modal_frequency=moved.modal_frequency * np.array([1, 1.03, 1, 1]))
    other = makers.make_set(plants, plant_matrices(moved), makers.lead_weight(1.0))
    found = compare_sets(small_set, other)
    shifts = {mode.name: mode.frequency[1] / mode.frequency[0] for mode in found.modes}
    expected = {"pivot": 1.0, "M1": 1.0, "M2": 1.03, "M3": 1.0, "M4": 1.0}
    assert shifts == pytest.approx(expected, rel=1e-6)
    assert found.price_a.bandwidth.crossover > 0.0
    assert found.price_b is not None


def test_another_number_of_unstable_poles_is_not_contained(small_set):
    n = small_set.nominal
    a = n.A.copy()
    a[1, 1] = -a[1, 1]
    unstable = replace(small_set, nominal=f.Nominal(a, n.B, n.C, n.D))
    found = containment(Surroundings(small_set), Surroundings(unstable), small_set.band)
    assert found.reach == np.inf
    assert not found.holds


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"form": "parametric"}, "form of the second set"),
        ({"time": f.TimeBase("sampled", 2e-5), "band": (50.0, 2e4)}, "period of the second set"),
        ({"inputs": (f.Channel("drive", "V"),)}, "units of the second set"),
        ({"band": (25_000.0, 30_000.0)}, "band of the second set"),
    ],
)
def test_what_cannot_be_compared_is_refused(small_set, change, said):
    with pytest.raises(InputError, match=said):
        compare_sets(small_set, replace(small_set, **change))
