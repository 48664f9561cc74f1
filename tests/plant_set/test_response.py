from dataclasses import replace

import control
import numpy as np
import pytest

from identkit.errors import InputError
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.plant_set import fields as f
from identkit.plant_set.interconnection import output_multiplicative
from identkit.plant_set.response import (
    balance,
    member_response,
    nominal_response,
    plant_response,
    state_space_response,
)
from identkit.plant_set.sample import stack_diagonal, static
from identkit.plant_set.schur import SchurResponse, plant_matrices

GRID = np.geomspace(50.0, 20_000.0, 200)


def random_system(seed: int, states: int, outputs: int, inputs: int) -> f.Matrices:
    draw = np.random.default_rng(seed).standard_normal
    return f.Matrices(
        1e4 * (draw((states, states)) - 4.0 * np.eye(states)),
        draw((states, inputs)),
        draw((outputs, states)) * 1e4,
        draw((outputs, inputs)),
    )


@pytest.mark.parametrize("base", ["pivot", "free", "none"])
def test_plant_response_is_the_modal_model(make_family, base):
    """The modal model of the project is computed elsewhere: both must say the same."""
    item = replace(make_family(1, base=base)[0], delay=2e-5)
    modal = ModalParameters(
        item.modal_frequency,
        item.damping_ratio,
        item.residue[:, 0, 0],
        item.residue_rate[:, 0, 0],
        base,
        float(item.base_gain[0, 0]),
        item.base_frequency,
        item.base_damping_ratio,
        float(item.base_residue[0, 0]),
        float(item.feedthrough[0, 0]),
        item.delay,
    )
    expected = modal_response(GRID, modal)
    np.testing.assert_allclose(plant_response(item, GRID)[0, 0], expected, rtol=1e-12)


@pytest.mark.parametrize("base", ["pivot", "free", "none"])
def test_plant_matrices_realise_the_plant(make_family, base):
    item = make_family(1, base=base)[0]
    item = replace(item, residue_rate=np.full(item.residue.shape, 3.0))
    response = state_space_response(plant_matrices(item), 2j * np.pi * GRID)
    np.testing.assert_allclose(response, plant_response(item, GRID), rtol=1e-9)


def test_response_agrees_with_python_control():
    system = random_system(1, 6, 2, 3)
    other = control.StateSpace(system.A, system.B, system.C, system.D)
    expected = other(2j * np.pi * GRID)
    np.testing.assert_allclose(state_space_response(system, 2j * np.pi * GRID), expected, rtol=1e-9)
    fast = np.moveaxis(SchurResponse(system)(2j * np.pi * GRID), 0, -1)
    np.testing.assert_allclose(fast, expected, rtol=1e-9)


def test_balancing_keeps_the_system():
    system = random_system(2, 5, 1, 1)
    scale = np.array([1.0, 1e6, 1e-4, 1e3, 1.0])
    skewed = replace(
        system,
        A=system.A * scale[:, None] / scale,
        B=system.B * scale[:, None],
        C=system.C / scale,
    )
    even = balance(skewed)
    assert np.linalg.norm(even.A) < 10 * np.linalg.norm(system.A) < np.linalg.norm(skewed.A)
    np.testing.assert_allclose(
        state_space_response(even, 1j * GRID), state_space_response(system, 1j * GRID), rtol=1e-9
    )


def test_the_nominal_delay_turns_the_phase_only(small_set):
    late = replace(small_set, nominal=replace(small_set.nominal, delay=1e-5))
    ratio = nominal_response(late, GRID) / nominal_response(small_set, GRID)
    np.testing.assert_allclose(ratio[0, 0], np.exp(-2j * np.pi * GRID * 1e-5), rtol=1e-9)


def test_a_member_is_the_nominal_times_one_plus_weighted_delta(small_set):
    delta = random_system(5, 3, 1, 1)
    points = 2j * np.pi * GRID
    nominal = nominal_response(small_set, GRID)[0, 0]
    weight = state_space_response(small_set.weights.left, points)[0, 0]
    direct = nominal * (1.0 + weight * state_space_response(delta, points)[0, 0])
    lft = small_set.frequency_response(GRID, delta=[delta])[0, 0]
    np.testing.assert_allclose(lft, direct, rtol=1e-9)
    np.testing.assert_allclose(small_set.frequency_response(GRID)[0, 0], nominal, rtol=0)


def test_matrix_plants_with_two_weights():
    nominal, left, right = (
        random_system(1, 4, 3, 2),
        random_system(2, 2, 3, 2),
        random_system(3, 3, 1, 3),
    )
    around = output_multiplicative(nominal, left, right)
    delta = random_system(4, 2, 2, 1)
    points = 2j * np.pi * GRID
    p, w, r, d = (
        np.moveaxis(state_space_response(part, points), -1, 0)
        for part in (nominal, left, right, delta)
    )
    direct = p + w @ d @ r @ p
    m = np.moveaxis(state_space_response(around, points), -1, 0)
    lft = m[:, 1:, 2:] + m[:, 1:, :2] @ d @ np.linalg.solve(
        np.eye(1) - m[:, :1, :2] @ d, m[:, :1, 2:]
    )
    np.testing.assert_allclose(lft, direct, rtol=1e-8)


def test_the_worked_example_with_two_blocks(small_set):
    """The two-block interconnection written out in `interconnection`: (1 + W Delta) P0 k."""
    weight, nominal = small_set.weights.left, small_set.nominal
    both = stack_diagonal([nominal, weight])
    into = np.array([[0.3, 0.0, 2.0], [0.0, 1.0, 0.0]])
    out = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0]])
    feed = out @ both.D @ into
    feed[0, 2] = 1.0
    around = f.Interconnection(
        both.A,
        both.B @ into,
        out @ both.C,
        feed,
        blocks=(f.Block("real-repeated", 1, 1, "gain"), f.Block("complex-full", 1, 1)),
    )
    two = replace(small_set, interconnection=around)
    delta = random_system(6, 2, 1, 1)
    points = 2j * np.pi * GRID
    w, d = (state_space_response(part, points)[0, 0] for part in (weight, delta))
    expected = (1.0 + w * d) * nominal_response(small_set, GRID)[0, 0] * (2.0 + 0.3 * 0.7)
    member = member_response(two, GRID, [static(np.array([[0.7]])), delta])
    np.testing.assert_allclose(member[0, 0], expected, rtol=1e-9)


def test_wrong_blocks_are_refused(small_set):
    with pytest.raises(InputError, match="delta: found 2 blocks; expected 1 blocks"):
        small_set.frequency_response(GRID, delta=[static(np.eye(1))] * 2)
    with pytest.raises(InputError, match=r"delta\[0\]: found shape \(2, 2\)"):
        small_set.frequency_response(GRID, delta=[static(np.eye(2))])
