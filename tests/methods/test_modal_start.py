"""Pole relocation, delay scan, forward selection and score test, each on its own."""

import numpy as np
import pytest

from identkit.methods.delay_scan import STEP, scan_delay
from identkit.methods.modal_least_squares import starting_poles
from identkit.methods.modal_problem import ModalProblem, ModelShape, as_reals
from identkit.methods.modal_solution import scale_data, solve
from identkit.methods.order_selection import (
    forward_selection,
    information_criterion,
    score_test,
    wald_statistics,
)
from identkit.methods.order_settling import resized
from identkit.methods.pole_relocation import relocate_poles, starting_sections, zeros_of_sigma
from tests.methods.invented_plants import draw


def scaled(drawn):
    return scale_data(drawn.frequency, drawn.response, drawn.variance)


@pytest.mark.parametrize("base", ["none", "free"])
def test_relocation_finds_poles_of_clean_data(base):
    drawn = draw(np.random.default_rng(2), base=base, modes=5, noise=1e-6, delay=False)
    data = scaled(drawn)
    stiffness, rate = relocate_poles(
        data, 0.0, *starting_sections(data.x, 5), double_integrator=base == "free", iterations=10
    )
    found = np.sqrt(stiffness) * data.reference / (2 * np.pi)
    np.testing.assert_allclose(found, drawn.truth.modal_frequency, rtol=1e-5)
    np.testing.assert_allclose(rate / 2 / np.sqrt(stiffness), drawn.truth.damping_ratio, rtol=1e-3)


def test_zeros_of_sigma_are_roots_of_the_numerator():
    stiffness, rate = np.array([1.0, 4.0]), np.array([0.1, 0.3])
    sigma = np.array([0.3, -0.2, 0.05, 0.1, 1.0])
    first, second = (np.array([1.0, r, a]) for r, a in zip(rate, stiffness, strict=True))
    top = np.polymul(first, second) * sigma[-1]
    top = np.polyadd(top, np.polymul([sigma[2], sigma[0]], second))
    top = np.polyadd(top, np.polymul([sigma[3], sigma[1]], first))
    roots = np.roots(top)
    found, slope = zeros_of_sigma(stiffness, rate, sigma)
    expected = np.sort(np.abs(roots[roots.imag > 0]) ** 2)
    np.testing.assert_allclose(np.sort(found), expected, rtol=1e-10)
    assert np.all(slope > 0)


def test_delay_scan_comes_within_a_step():
    drawn = draw(np.random.default_rng(4), modes=5)
    data = scaled(drawn)
    poles = starting_poles(drawn.truth, data.reference)
    rows = ModalProblem(data, ModelShape("pivot", 5)).columns(poles)
    delays, costs = scan_delay(data, rows)
    assert abs(delays[np.argmin(costs)] - poles.delay) <= STEP


def test_forward_selection_takes_what_is_there():
    rng = np.random.default_rng(0)
    rows = rng.standard_normal((9, 500))
    target = 5.0 * rows[0] + 3.0 * rows[4] - 2.0 * rows[7] + 0.1 * rng.standard_normal(500)
    groups = np.arange(8)
    assert forward_selection(rows, target, 1, groups, threshold=1.0, count=None) == [3, 6]
    assert forward_selection(rows, target, 1, groups, threshold=1.0, count=1) == [3]
    assert forward_selection(rows[:1], target, 1, groups[:0], threshold=1.0, count=None) == []


def test_forward_selection_does_not_take_a_column_twice():
    rng = np.random.default_rng(1)
    one = rng.standard_normal(300)
    rows = np.array([one, one, rng.standard_normal(300)])
    taken = forward_selection(rows, one, 0, np.arange(3), threshold=1e-6, count=2)
    assert len({*taken} & {0, 1}) >= 1
    assert taken[0] in (0, 1)


def fitted_without(drawn, missing, general=False):
    data = scaled(drawn)
    poles = starting_poles(drawn.truth, data.reference)
    pivot = int(drawn.truth.base == "pivot")
    shape = ModelShape(drawn.truth.base, drawn.truth.modal_frequency.size, general=general)
    whole = solve(ModalProblem(data, shape), poles)
    assert whole.shape.sections == poles.log_frequency.size == pivot + shape.modes
    return whole, resized(whole, drop=missing)


@pytest.mark.parametrize("general", [False, True])
def test_score_test_points_at_the_missing_mode(general):
    drawn = draw(np.random.default_rng(6), modes=5, general=general)
    whole, less = fitted_without(drawn, 2, general)
    best = score_test(less)[0]
    place = whole.poles.log_frequency[1 + 2]
    assert abs(best.log_frequency - place) < 2.0 * np.exp(whole.poles.log_damping[1 + 2])
    again = resized(less, add=best)
    assert again.cost == pytest.approx(whole.cost, rel=1e-3)


def test_score_test_is_quiet_where_nothing_is_missing():
    gains = []
    for seed in range(6):
        drawn = draw(np.random.default_rng(seed), modes=3)
        whole, _ = fitted_without(drawn, 0)
        gains.append(score_test(whole)[0].gain)
    assert max(gains) < 30.0


def test_gain_of_a_candidate_is_the_decrease_with_poles_held():
    drawn = draw(np.random.default_rng(7), modes=4)
    _, less = fitted_without(drawn, 1)
    best = score_test(less)[0]
    data = less.problem.data
    x, s = data.x, 1j * data.x
    natural, damping = np.exp(best.log_frequency), np.exp(best.log_damping)
    column = as_reals(data.weight / (natural**2 + 2 * damping * natural * s + s * s))
    rows = np.concatenate([less.state.columns, less.problem.derivatives(less.state)])
    design = np.concatenate([rows, column[None]])
    design = (design / np.linalg.norm(design, axis=1)[:, None]).T
    left = less.state.residual
    for columns, expected in ((design, best.gain), (design[:, :-1], 0.0)):
        fitted = columns @ np.linalg.lstsq(columns, left)[0]
        assert fitted @ fitted == pytest.approx(expected, rel=1e-4, abs=1e-2)
    assert x.size == 1200


def test_wald_statistic_is_the_squared_significance():
    drawn = draw(np.random.default_rng(9), modes=4)
    whole, _ = fitted_without(drawn, 0)
    assert wald_statistics(whole).shape == (4,)
    assert np.all(wald_statistics(whole) > 25.0)


def test_information_criterion_prices_parameters_and_places():
    assert information_criterion(10.0, 2.0, 0, 0, 100) == 5.0
    step = information_criterion(0.0, 1.0, 3, 1, 100)
    assert step == pytest.approx(3 * np.log(200) + 2 * np.log(100))
