from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set.raw_points import judge_points
from identkit.plant_set.response import evaluation_points, plant_response, state_space_response

GRID = np.geomspace(50.0, 20_000.0, 400)


def weight(contents):
    points = evaluation_points(GRID)
    return np.abs(state_space_response(contents.weights.left, points)[0, 0])


def member(contents, share):
    """A response whose error is `share` of the weight everywhere."""
    return contents.frequency_response(GRID)[0, 0] * (1.0 + share * weight(contents))


def test_three_verdicts_and_no_points(small_set):
    nominal = np.abs(small_set.frequency_response(GRID)[0, 0])
    measured = np.array([member(small_set, x) for x in (0.9, 1.2, 1.2, 1.2)])
    measured[3] = np.nan
    quiet, loud = (x * weight(small_set) * nominal for x in (0.001, 0.5))
    variance = np.array([quiet, quiet, loud, quiet]) ** 2
    judged = judge_points(small_set, GRID, measured, variance)
    assert judged.verdict == ("held", "not held", "cannot tell", "no points")
    np.testing.assert_allclose(judged.reach, [0.9, 1.2, 1.2, np.nan], rtol=1e-9)
    q = np.sqrt(np.log(GRID.size / 0.05))
    expected = [0.9 - 0.001 * q, 1.2 - 0.001 * q, 0.0, np.nan]
    np.testing.assert_allclose(judged.reach_with_allowance, expected, atol=1e-9)
    assert judged.used.tolist() == [400, 400, 400, 0]
    assert judged.left_out.tolist() == [0, 0, 0, 400]


def test_the_allowance_is_scaled_like_the_error(small_set):
    """sigma of P/P0 is sigma of P over |P0|: a noisy minimum of the nominal is forgiven there."""
    measured = member(small_set, 1.3)[None]
    judged = judge_points(small_set, GRID, measured, np.full((1, 400), 1e-30))
    assert judged.verdict == ("not held",)
    nominal = np.abs(small_set.frequency_response(GRID)[0, 0])
    q = np.sqrt(np.log(400 / 0.05))
    noise = 0.31 * weight(small_set) * nominal / q
    assert judge_points(small_set, GRID, measured, noise[None] ** 2).verdict == ("cannot tell",)
    noise[200] *= 0.9
    judged = judge_points(small_set, GRID, measured, noise[None] ** 2)
    assert judged.verdict == ("not held",)
    assert judged.frequency_with_allowance[0] == GRID[200]


def test_masked_and_outside_points_do_not_count(small_set):
    measured = member(small_set, 0.5)[None].copy()
    measured[0, 100] *= 50.0
    usable = np.ones((1, 400), dtype=bool)
    variance = np.zeros((1, 400))
    assert judge_points(small_set, GRID, measured, variance).verdict == ("not held",)
    usable[0, 100] = False
    judged = judge_points(small_set, GRID, measured, variance, usable)
    assert judged.verdict == ("held",)
    assert judged.left_out[0] == 1
    narrow = replace(small_set, band=(GRID[101] * 0.999, 20_000.0))
    judged = judge_points(narrow, GRID, measured, variance)
    assert judged.verdict == ("held",)
    assert (judged.used[0], judged.outside_band[0], judged.left_out[0]) == (299, 101, 0)


def test_unknown_noise_never_proves_a_response_out(small_set):
    measured = np.array([member(small_set, 3.0), member(small_set, 0.9)])
    assert judge_points(small_set, GRID, measured, None).verdict == ("cannot tell", "held")
    variance = np.full((2, 400), np.nan)
    variance[0, 7] = 0.0
    judged = judge_points(small_set, GRID, measured, variance)
    assert judged.verdict[0] == "not held"
    assert judged.frequency_with_allowance[0] == GRID[7]


def test_noise_alone_is_called_out_no_more_often_than_stated(small_set):
    """2000 responses on the edge of the set, circular noise: at most 5 % beyond the allowance."""
    generator = np.random.default_rng(5)
    nominal = np.abs(small_set.frequency_response(GRID)[0, 0])
    edge = member(small_set, 1.0)
    sigma = 0.3 * weight(small_set) * nominal
    noise = generator.standard_normal((2000, 400)) + 1j * generator.standard_normal((2000, 400))
    measured = edge + sigma / np.sqrt(2.0) * noise
    judged = judge_points(small_set, GRID, measured, np.broadcast_to(sigma**2, (2000, 400)))
    share = np.mean([verdict == "not held" for verdict in judged.verdict])
    # Triangle inequality makes the allowance conservative: the noise seldom points outwards.
    assert share <= 0.05 + 3 * np.sqrt(0.05 * 0.95 / 2000)
    assert share > 0.0
    assert "cannot tell" in judged.verdict


@pytest.mark.parametrize("form", ["additive", "inverse-multiplicative"])
def test_other_scalar_forms(small_set, form):
    one = replace(small_set, form=form)
    nominal = small_set.frequency_response(GRID)[0, 0]
    inside = {
        "additive": nominal + 1.1 * weight(small_set),
        "inverse-multiplicative": nominal / (1.0 + 1.1 * weight(small_set)),
    }[form]
    per_plant = {"additive": 1.0, "inverse-multiplicative": np.abs(nominal / inside**2)}[form]
    sigma = 0.01 * weight(small_set) / per_plant
    judged = judge_points(one, GRID, inside[None], sigma[None] ** 2)
    q = np.sqrt(np.log(GRID.size / 0.05))
    assert judged.reach[0] == pytest.approx(1.1, rel=1e-9)
    assert judged.reach_with_allowance[0] == pytest.approx(1.1 - 0.01 * q, rel=1e-9)


def test_matrix_plants_are_refused(small_set):
    two = replace(small_set, outputs=small_set.outputs * 2)
    with pytest.raises(InputError, match="2 outputs and 1 inputs"):
        judge_points(two, GRID, np.ones((1, 400), dtype=complex), None)


def test_a_listed_plant_is_held_at_its_own_points(small_set):
    measured = np.array([plant_response(p, GRID)[0, 0] for p in small_set.plants])
    judged = judge_points(small_set, GRID, measured, None)
    assert set(judged.verdict) == {"held"}
    stored = np.array([plant.reach for plant in small_set.plants])
    assert np.all(judged.reach <= stored * (1 + 1e-9))
    assert isinstance(small_set.plants[0], f.FittedPlant)
