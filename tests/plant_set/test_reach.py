from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set.pointwise import pointwise_reach
from identkit.plant_set.reach import (
    Surroundings,
    count_unstable,
    reach_of_plants,
    reach_of_response,
)
from identkit.plant_set.response import plant_response
from identkit.plant_set.schur import plant_matrices, plant_poles, zeros


def dense(contents: f.PlantSetFields, item: f.FittedPlant) -> tuple[float, float]:
    """Slow twin: a hundred thousand points, no refinement."""
    grid = np.geomspace(*contents.band, 100_001)
    response = np.moveaxis(plant_response(item, grid), -1, 0)
    values = Surroundings(contents).reach_at(grid, response)
    return float(values.max()), float(grid[values.argmax()])


def test_reach_is_never_below_a_dense_grid(small_set):
    for item, value, place in zip(small_set.plants, *vars(small_set.reach()).values(), strict=True):
        slow, where = dense(small_set, item)
        assert slow <= value * (1.0 + 1e-12)
        assert value == pytest.approx(slow, rel=1e-5)
        assert place == pytest.approx(where, rel=1e-4)


def test_a_very_sharp_mode_between_all_grids_is_found(small_set, make_family):
    """Half-width 2e-6 of its frequency: no grid of thousands of points would hit it."""
    sharp = make_family(1)[0]
    sharp = replace(
        sharp,
        modal_frequency=np.append(sharp.modal_frequency, 3217.123),
        damping_ratio=np.append(sharp.damping_ratio, 2e-6),
        residue=np.append(sharp.residue, [[[3000.0]]], axis=0),
        residue_rate=np.append(sharp.residue_rate, [[[0.0]]], axis=0),
    )
    reach = reach_of_plants(small_set, [sharp])
    grid = 3217.123 * (1.0 + 2e-6 * np.linspace(-3.0, 3.0, 20_001))
    response = np.moveaxis(plant_response(sharp, grid), -1, 0)
    truth = Surroundings(small_set).reach_at(grid, response).max()
    assert reach.value[0] == pytest.approx(truth, rel=1e-7)
    assert reach.frequency[0] == pytest.approx(3217.123, rel=1e-5)


def test_reach_scales_with_the_weight_and_the_largest_is_one(small_set):
    assert small_set.reach().value.max() == pytest.approx(1.0, abs=1e-9)
    left = small_set.weights.left
    half = replace(left, C=0.5 * left.C, D=0.5 * left.D)
    weights = replace(small_set.weights, left=half)
    smaller = replace(small_set, weights=weights)
    np.testing.assert_allclose(
        reach_of_plants(smaller, small_set.plants).value, 2.0 * small_set.reach().value, rtol=1e-9
    )


def test_the_band_limits_the_claim(small_set):
    low = replace(small_set, band=(50.0, 1000.0))
    reach = reach_of_plants(low, small_set.plants)
    assert np.all(reach.value < small_set.reach().value)
    assert np.all(reach.frequency <= 1000.0)


def test_chunks_do_not_change_the_answer(small_set, make_family):
    plants = make_family(50, seed=9)
    together = small_set.reach(plants)
    some = [0, 23, 24, 47, 48, 49]
    apart = [small_set.reach([plants[k]]).value[0] for k in some]
    np.testing.assert_allclose(together.value[some], apart, rtol=1e-9)
    assert small_set.reach([]).value.shape == (0,)


def test_delay_counts(small_set):
    item = replace(small_set.plants[0], delay=3e-6)
    slow, _ = dense(small_set, item)
    assert small_set.reach([item]).value[0] == pytest.approx(slow, rel=1e-5)
    assert small_set.reach([item]).value[0] != pytest.approx(small_set.plants[0].reach, rel=1e-3)


def test_another_number_of_unstable_poles_is_never_held(small_set):
    bad = replace(small_set.plants[0], damping_ratio=-small_set.plants[0].damping_ratio)
    assert np.isinf(small_set.reach([bad]).value[0])
    assert count_unstable(plant_poles(bad)) == 8
    assert count_unstable(plant_poles(small_set.plants[0])) == 0


def test_a_free_base_is_on_the_axis_and_does_not_count(make_family):
    item = make_family(1, base="free")[0]
    assert count_unstable(plant_poles(item)) == 0
    poles = np.linalg.eigvals(plant_matrices(item).A)
    assert count_unstable(poles) == 0
    split = np.append(poles, [0.2, -0.2])
    assert count_unstable(split) == 1
    assert count_unstable(split, rest=1e-3 * 2 * np.pi * 50.0) == 0


def test_zeros_are_where_the_plant_vanishes(make_family):
    item = replace(make_family(1)[0], delay=0.0)
    found = zeros(plant_matrices(item), 2 * np.pi * 2e4)
    value = np.array(
        [
            4.0e6 / ((2 * np.pi * 60) ** 2 + 0.6 * 2 * np.pi * 60 * s + s**2)
            + 1e-4
            + sum(
                r[0, 0] / ((2 * np.pi * w) ** 2 + 2 * z * 2 * np.pi * w * s + s**2)
                for r, w, z in zip(
                    item.residue, item.modal_frequency, item.damping_ratio, strict=True
                )
            )
            for s in found
        ]
    )
    assert found.size == 10
    assert np.abs(value).max() < 1e-4 * 1e-8


def test_a_response_is_judged_at_its_own_points(small_set):
    grid = np.linspace(10.0, 30_000.0, 400)
    item = small_set.plants[3]
    measured = plant_response(item, grid)
    reach = reach_of_response(small_set, grid, measured)
    inside = grid[(grid >= 50.0) & (grid <= 20_000.0)]
    expected = Surroundings(small_set).reach_at(
        inside, np.moveaxis(plant_response(item, inside), -1, 0)
    )
    assert reach.value[0] == pytest.approx(expected.max(), rel=1e-12)
    assert reach.value[0] <= item.reach
    holes = measured[0, 0].copy()
    holes[::2] = np.nan
    assert reach_of_response(small_set, grid, holes).value[0] <= reach.value[0]
    nothing = small_set.reach_of_response(grid, np.full(400, np.nan + 0j))
    assert np.isnan(nothing.value[0])


FORMS = ["additive", "multiplicative", "input-multiplicative", "inverse-multiplicative"]


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("shape", [(1, 1), (2, 2), (3, 2), (2, 3)])
def test_the_delta_of_each_form_explains_the_plant(form, shape):
    """Build plants from a known Delta of norm 0.7; the least Delta cannot be larger, and square
    ones are unique."""
    generator = np.random.default_rng(8)

    def draw(rows: int, columns: int) -> f.ComplexArray:
        return generator.standard_normal((5, rows, columns)) + 1j * generator.standard_normal(
            (5, rows, columns)
        )

    outputs, inputs = shape
    sides = {"additive": (outputs, inputs), "input-multiplicative": (inputs, inputs)}
    rows, columns = sides.get(form, (outputs, outputs))
    nominal, left, right, delta = (
        draw(outputs, inputs),
        draw(rows, rows),
        draw(columns, columns),
        draw(rows, columns),
    )
    delta *= 0.7 / np.linalg.norm(delta, 2, axis=(1, 2))[:, None, None]
    one = np.eye(rows)
    plant = {
        "additive": lambda: nominal + left @ delta @ right,
        "multiplicative": lambda: (one + left @ delta @ right) @ nominal,
        "input-multiplicative": lambda: nominal @ (one + left @ delta @ right),
        "inverse-multiplicative": lambda: np.linalg.solve(one + left @ delta @ right, nominal),
    }[form]()
    refused = {
        "multiplicative": outputs < inputs,
        "input-multiplicative": inputs < outputs,
        "inverse-multiplicative": inputs != outputs,
    }.get(form, False)
    if refused:
        with pytest.raises(InputError, match=form):
            pointwise_reach(form, plant, nominal, left, right)
        return
    found = pointwise_reach(form, plant, nominal, left, right)
    if outputs == inputs or form == "additive":
        np.testing.assert_allclose(found, 0.7, rtol=1e-9)
    else:
        assert np.all(found <= 0.7 * (1 + 1e-9))


def test_an_unknown_form_is_refused():
    one = np.ones((1, 1, 1), dtype=complex)
    with pytest.raises(InputError, match="'parametric'"):
        pointwise_reach("parametric", one, one, one, one)


def test_no_error_under_no_weight_is_reach_zero():
    one = np.ones((1, 1, 1), dtype=complex)
    assert pointwise_reach("additive", one, one, 0 * one, one)[0] == 0.0
    assert np.isinf(pointwise_reach("additive", 2 * one, one, 0 * one, one)[0])
