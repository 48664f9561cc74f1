from dataclasses import replace

import control
import numpy as np
import pytest

from identkit.plant_set import fields as f
from identkit.plant_set.response import evaluation_points, state_space_response
from identkit.plant_set.sample import draw_block, draw_members

GRID = np.geomspace(50.0, 20_000.0, 150)


@pytest.mark.parametrize("period", [0.0, 2e-5])
@pytest.mark.parametrize(("rows", "columns"), [(1, 1), (2, 2), (2, 3), (3, 1)])
def test_blocks_are_stable_with_norm_at_most_one(rows, columns, period):
    """Norms by slycot's level-set method, independent of how the blocks are made."""
    generator = np.random.default_rng(1)
    time = f.TimeBase("sampled", period) if period else f.TimeBase()
    norms = []
    for _ in range(25):
        block = f.Block("complex-full", rows, columns)
        drawn = draw_block(block, (50.0, 20_000.0), time, generator)
        system = control.StateSpace(drawn.A, drawn.B, drawn.C, drawn.D, period)
        poles = np.linalg.eigvals(drawn.A)
        assert np.all(np.abs(poles) < 1.0 if period else poles.real < 0.0)
        norms.append(
            np.linalg.norm(drawn.D, 2) if drawn.states == 0 else control.linfnorm(system)[0]
        )
    assert max(norms) <= 1.0 + 1e-9
    assert max(norms) > 1.0 - 1e-6
    assert min(norms) < 0.9


def test_members_lie_in_the_set(small_set):
    nominal = small_set.frequency_response(GRID)[0, 0]
    weight = state_space_response(small_set.weights.left, evaluation_points(GRID))[0, 0]
    for member in small_set.sample(40, seed=2):
        error = member.frequency_response(GRID)[0, 0] / nominal - 1.0
        assert np.all(np.abs(error) <= np.abs(weight) * (1.0 + 1e-9))


def test_the_state_space_of_a_member_has_its_response(small_set):
    for member in small_set.sample(6, seed=4):
        system = member.state_space()
        response = state_space_response(system, evaluation_points(GRID))
        np.testing.assert_allclose(response, member.frequency_response(GRID), rtol=1e-8)
        assert np.linalg.eigvals(system.A).real.max() < 0.0


def test_the_seed_decides(small_set):
    once, again, other = (
        small_set.sample(2, seed=seed)[1].frequency_response(GRID) for seed in (7, 7, 8)
    )
    assert np.array_equal(once, again)
    assert not np.allclose(once, other)


def test_one_real_factor_moves_all_its_blocks(small_set):
    blocks = (
        f.Block("real-repeated", 2, 2, "gain"),
        f.Block("real-repeated", 1, 1, "gain"),
        f.Block("real-repeated", 1, 1, "drift"),
    )
    around = replace(small_set.interconnection, blocks=blocks)
    values = []
    for member in draw_members(replace(small_set, interconnection=around), 200, seed=1):
        first, second, third = (part.D for part in member.delta)
        assert np.array_equal(first, second[0, 0] * np.eye(2))
        assert second[0, 0] != third[0, 0]
        values.append(second[0, 0])
    assert np.abs(values).max() <= 1.0
    assert abs(np.mean(values)) < 0.15
    assert np.ptp(values) > 1.9
