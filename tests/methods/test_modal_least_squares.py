"""Refinement: covariance equals the Cramer-Rao bound, outcomes, names, units."""

import numpy as np
import pytest

from identkit.methods.modal_least_squares import refine_modal_model
from identkit.methods.modal_model import modal_response
from identkit.outcomes import Outcome
from tests.methods.invented_plants import Drawn, cramer_rao, draw


@pytest.mark.parametrize("general", [False, True])
@pytest.mark.parametrize("base", ["free", "pivot", "none"])
@pytest.mark.parametrize("delay", [True, False])
def test_covariance_is_the_cramer_rao_bound_at_the_estimate(base, general, delay):
    drawn = draw(np.random.default_rng(1), base=base, general=general, modes=4, delay=delay)
    fit = refine_modal_model(
        drawn.frequency, drawn.response, drawn.variance, drawn.truth, delay=delay
    )
    assert fit.outcome == Outcome.DONE
    at_estimate = Drawn(drawn.frequency, drawn.response, drawn.variance, fit.parameters)
    bound = cramer_rao(at_estimate, general=general, delay=delay)
    size = np.sqrt(np.where(np.diag(bound) > 0, np.diag(bound), 1.0))
    np.testing.assert_allclose(
        fit.covariance / np.outer(size, size), bound / np.outer(size, size), atol=2e-3
    )


def test_parameters_held_fixed_have_no_variance():
    drawn = draw(np.random.default_rng(2), modes=3, delay=False)
    fit = refine_modal_model(
        drawn.frequency, drawn.response, drawn.variance, drawn.truth, delay=False, feedthrough=False
    )
    assert fit.parameter_names[:2] == ("delay", "feedthrough")
    assert not fit.covariance[:2].any()
    assert fit.parameters.delay == fit.parameters.feedthrough == 0.0


def test_errors_are_those_the_covariance_states():
    rng = np.random.default_rng(3)
    errors = []
    for _ in range(30):
        drawn = draw(rng, modes=4)
        fit = refine_modal_model(drawn.frequency, drawn.response, drawn.variance, drawn.truth)
        off = fit.parameters.modal_frequency - drawn.truth.modal_frequency
        errors.append(off / np.sqrt(np.diag(fit.covariance)[5::3]))
    # 120 draws of unit variance: their mean square has a standard error of 0.13
    assert np.mean(np.square(errors)) == pytest.approx(1.0, abs=0.45)


def test_noise_ratio_is_near_one_and_scales_with_the_variance():
    drawn = draw(np.random.default_rng(4), modes=4)
    fit = refine_modal_model(drawn.frequency, drawn.response, drawn.variance, drawn.truth)
    # 2400 reals: standard error sqrt(2/2400) = 0.03
    assert fit.noise_ratio == pytest.approx(1.0, abs=0.12)
    again = refine_modal_model(drawn.frequency, drawn.response, 4 * drawn.variance, drawn.truth)
    assert again.noise_ratio == pytest.approx(fit.noise_ratio / 4, rel=1e-6)
    np.testing.assert_allclose(again.covariance[5:, 5:], 4 * fit.covariance[5:, 5:], rtol=1e-3)


def test_modes_come_out_ascending_and_say_where_they_started():
    drawn = draw(np.random.default_rng(5), modes=4)
    order = np.array([2, 0, 3, 1])
    mixed = type(drawn.truth)(
        **{
            **drawn.truth.__dict__,
            "modal_frequency": drawn.truth.modal_frequency[order],
            "damping_ratio": drawn.truth.damping_ratio[order],
            "residue": drawn.truth.residue[order],
        }
    )
    fit = refine_modal_model(drawn.frequency, drawn.response, drawn.variance, mixed)
    assert np.all(np.diff(fit.parameters.modal_frequency) > 0)
    np.testing.assert_array_equal(order[fit.start_mode], np.arange(4))


def test_without_variance_it_is_estimated():
    drawn = draw(np.random.default_rng(6), modes=4)
    fit = refine_modal_model(drawn.frequency, drawn.response, None, drawn.truth)
    known = refine_modal_model(drawn.frequency, drawn.response, drawn.variance, drawn.truth)
    assert fit.variance_estimated
    assert np.isnan(fit.noise_ratio)
    ratio = np.diag(fit.covariance)[5:] / np.diag(known.covariance)[5:]
    np.testing.assert_allclose(ratio, 1.0, atol=0.5)


def test_residual_of_the_fit_is_the_stated_cost():
    drawn = draw(np.random.default_rng(7), modes=3)
    fit = refine_modal_model(drawn.frequency, drawn.response, drawn.variance, drawn.truth)
    error = drawn.response - modal_response(drawn.frequency, fit.parameters)
    cost = 2 * np.sum(np.abs(error) ** 2 / drawn.variance)
    assert fit.cost == pytest.approx(cost, rel=0.02)


@pytest.mark.parametrize(
    ("spoil", "outcome"),
    [
        (lambda y: np.full_like(y, np.nan), Outcome.NOT_FINITE),
        (lambda y: np.where(np.arange(y.size) < 6, y, np.nan), Outcome.TOO_FEW_POINTS),
        (lambda y: 0 * y, Outcome.TOO_FEW_POINTS),
    ],
)
def test_what_cannot_be_fitted_says_so(spoil, outcome):
    drawn = draw(np.random.default_rng(8), modes=3, points=200)
    fit = refine_modal_model(drawn.frequency, spoil(drawn.response), drawn.variance, drawn.truth)
    assert fit.outcome == outcome
    assert fit.parameters.modal_frequency.size == 0
    assert np.isnan(fit.covariance).all()


def test_two_modes_on_one_spot_are_called_singular():
    drawn = draw(np.random.default_rng(9), modes=2)
    double = type(drawn.truth)(
        **{
            **drawn.truth.__dict__,
            "modal_frequency": np.append(drawn.truth.modal_frequency, 1e9),
            "damping_ratio": np.append(drawn.truth.damping_ratio, 1e-3),
            "residue": np.append(drawn.truth.residue, 1.0),
            "residue_rate": np.zeros(3),
        }
    )
    fit = refine_modal_model(drawn.frequency, drawn.response, drawn.variance, double)
    assert fit.outcome in (Outcome.SINGULAR_COVARIANCE, Outcome.NOT_CONVERGED)
