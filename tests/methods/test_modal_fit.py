"""Automatic fit: finds what is there, invents nothing, says what went wrong, keeps its units."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.outcomes import Outcome
from tests.methods.invented_plants import Kind, Tally, draw


def noisy(rng, frequency, clean, relative, floor=0.0):
    variance = (relative * np.abs(clean)) ** 2 + floor**2
    error = rng.standard_normal((2, frequency.size)) * np.sqrt(variance / 2)
    return clean + error[0] + 1j * error[1], variance


KINDS = {
    "pivot": Kind(),
    "free": Kind(base="free"),
    "none": Kind(base="none"),
    "close pairs": Kind(close=True),
    "even grid": Kind(even=True),
    "noisy": Kind(noise=0.08),
    "no delay": Kind(delay=False),
    "fourteen modes": Kind(modes=14),
    "few points": Kind(points=300, damping=(0.02, 0.05)),
    "millihertz": Kind(band=(5e-5, 2.2e-2)),
    "gigahertz": Kind(band=(5e7, 2.2e10)),
}


@pytest.mark.parametrize("name", KINDS)
def test_finds_all_modes_and_no_others(name):
    kind, tally = KINDS[name], Tally()
    rng = np.random.default_rng(11)
    for _ in range(4):
        drawn = draw(rng, kind)
        fit = fit_modal_model(
            drawn.frequency, drawn.response, drawn.variance, base=kind.base, delay=kind.delay
        )
        assert fit.outcome == Outcome.DONE
        assert fit.noise_ratio == pytest.approx(1.0, abs=0.2)
        tally.count(drawn, fit, delay=kind.delay)
    assert tally.found == tally.wanted > 0
    assert tally.extra == 0
    assert np.sqrt(np.mean(np.square(tally.over_bound))) < 1.35


def test_general_residues_are_found_when_asked_and_when_needed():
    drawn = draw(np.random.default_rng(12), general=True)
    for residues in ("general", "auto"):
        tally = Tally()
        fit = fit_modal_model(drawn.frequency, drawn.response, drawn.variance, residues=residues)
        tally.count(drawn, fit, general=True)
        assert tally.found == tally.wanted
        assert "residue_rate_1" in fit.parameter_names
        assert fit.parameters.residue_rate.any()


def test_automatic_residues_stay_real_on_real_data():
    drawn = draw(np.random.default_rng(13))
    fit = fit_modal_model(drawn.frequency, drawn.response, drawn.variance, residues="auto")
    assert "residue_rate_1" not in fit.parameter_names
    assert not fit.parameters.residue_rate.any()


def test_unit_of_frequency_and_of_response_do_not_matter():
    drawn = draw(np.random.default_rng(14))
    plain = fit_modal_model(drawn.frequency, drawn.response, drawn.variance)
    scaled = fit_modal_model(drawn.frequency / 1e3, 1e6 * drawn.response, 1e12 * drawn.variance)
    one, other = plain.parameters, scaled.parameters
    np.testing.assert_allclose(other.modal_frequency, one.modal_frequency / 1e3, rtol=1e-6)
    np.testing.assert_allclose(other.damping_ratio, one.damping_ratio, rtol=1e-5)
    np.testing.assert_allclose(other.residue, one.residue, rtol=1e-5)
    assert other.delay == pytest.approx(one.delay * 1e3, rel=1e-5)
    assert other.base_residue == pytest.approx(one.base_residue, rel=1e-5)
    np.testing.assert_allclose(scaled.significance, plain.significance, rtol=1e-4)
    assert scaled.cost == pytest.approx(plain.cost, rel=1e-6)


@pytest.mark.parametrize("base", ["none", "pivot", "free"])
@pytest.mark.parametrize("stated", [True, False])
def test_noise_gives_no_modes(base, stated):
    rng = np.random.default_rng(15)
    for grid in (np.geomspace(10.0, 1e4, 600), np.linspace(10.0, 1e4, 600)):
        noise = rng.standard_normal((2, 600)) / np.sqrt(2)
        fit = fit_modal_model(
            grid, noise[0] + 1j * noise[1], np.ones(600) if stated else None, base=base
        )
        assert fit.outcome in (Outcome.NO_MODES, Outcome.SINGULAR_COVARIANCE)
        assert fit.parameters.modal_frequency.size == 0
        assert fit.significance.size == 0


def test_one_strongly_damped_mode():
    frequency = np.geomspace(0.1, 100.0, 200)
    truth = ModalParameters(
        np.array([8.0]), np.array([0.7]), np.array([2500.0]), np.zeros(1), "none"
    )
    response, variance = noisy(
        np.random.default_rng(16), frequency, modal_response(frequency, truth), 0.02
    )
    fit = fit_modal_model(frequency, response, variance, base="none")
    assert fit.outcome == Outcome.DONE
    assert fit.parameters.modal_frequency.size == 1
    error = np.sqrt(np.diag(fit.covariance))
    assert abs(fit.parameters.modal_frequency[0] - 8.0) < 5 * error[2]
    assert abs(fit.parameters.damping_ratio[0] - 0.7) < 5 * error[3]


def test_mode_at_the_edge_of_the_band():
    frequency = np.geomspace(100.0, 1e4, 800)
    modal = np.array([104.0, 2000.0, 9850.0])
    truth = ModalParameters(
        modal, np.full(3, 0.01), (2 * np.pi * modal) ** 2, np.zeros(3), "none", feedthrough=0.1
    )
    response, variance = noisy(
        np.random.default_rng(17), frequency, modal_response(frequency, truth), 0.03
    )
    fit = fit_modal_model(frequency, response, variance, base="none")
    np.testing.assert_allclose(fit.parameters.modal_frequency, modal, rtol=2e-3)


@pytest.mark.parametrize("number", [0, 3, 5])
def test_number_of_modes_can_be_given(number):
    drawn = draw(np.random.default_rng(18), modes=4)
    fit = fit_modal_model(drawn.frequency, drawn.response, drawn.variance, modes=number)
    assert fit.parameters.modal_frequency.size == number


def test_missing_points_are_left_out():
    drawn = draw(np.random.default_rng(19), modes=4)
    keep = np.random.default_rng(0).random(1200) > 0.3
    response = np.where(keep, drawn.response, complex(np.nan, np.nan))
    masked = fit_modal_model(drawn.frequency, response, drawn.variance)
    short = fit_modal_model(drawn.frequency[keep], drawn.response[keep], drawn.variance[keep])
    assert masked.points == keep.sum()
    np.testing.assert_array_equal(
        masked.parameters.modal_frequency, short.parameters.modal_frequency
    )
    np.testing.assert_array_equal(masked.covariance, short.covariance)


def test_what_cannot_be_fitted_says_so():
    drawn = draw(np.random.default_rng(20), modes=2, points=200)
    nothing = np.full(200, complex(np.nan, np.nan))
    fit = fit_modal_model(drawn.frequency, nothing, drawn.variance)
    assert fit.outcome == Outcome.NOT_FINITE
    few = slice(0, 5)
    fit = fit_modal_model(drawn.frequency[few], drawn.response[few], drawn.variance[few])
    assert fit.outcome == Outcome.TOO_FEW_POINTS


def test_data_that_do_not_follow_the_model_do_not_collect_modes_without_end():
    rng = np.random.default_rng(21)
    drawn = draw(rng, modes=4)
    x = np.log(drawn.frequency / drawn.frequency[0])
    wrong = drawn.response * (1 + 0.1 * np.sin(3 * x) + 0.08j * np.cos(4.3 * x))
    fit = fit_modal_model(drawn.frequency, wrong, drawn.variance)
    assert fit.parameters.modal_frequency.size <= 24
    assert (
        fit.noise_ratio > 1.2
        or fit.outcome == Outcome.MODE_LIMIT
        or (fit.parameters.modal_frequency.size < 16)
    )


def test_reaching_the_cap_is_said():
    drawn = draw(np.random.default_rng(22), modes=6, points=45, band=(50.0, 2000.0), noise=1e-4)
    fit = fit_modal_model(drawn.frequency, drawn.response, drawn.variance)
    assert fit.parameters.modal_frequency.size <= 4
    assert fit.outcome in (Outcome.MODE_LIMIT, Outcome.NOT_CONVERGED, Outcome.SINGULAR_COVARIANCE)


def test_clean_data_without_variance():
    drawn = draw(np.random.default_rng(23), modes=4, points=600)
    clean = modal_response(drawn.frequency, drawn.truth)
    fit = fit_modal_model(drawn.frequency, clean, None)
    np.testing.assert_allclose(
        fit.parameters.modal_frequency, drawn.truth.modal_frequency, rtol=1e-6
    )


def test_pivot_is_the_leading_section():
    drawn = draw(np.random.default_rng(24))
    fit = fit_modal_model(drawn.frequency, drawn.response, drawn.variance)
    assert fit.parameters.base_frequency == pytest.approx(60.0, rel=0.02)
    assert fit.parameters.base_damping_ratio == pytest.approx(0.35, rel=0.05)


def test_weights_from_measured_size_do_not_bias():
    rng = np.random.default_rng(25)
    off = []
    for _ in range(6):
        drawn = draw(rng, modes=4, noise=0.1, weakest=0.2)
        measured = (0.1 * np.abs(drawn.response)) ** 2
        fit = fit_modal_model(drawn.frequency, drawn.response, measured)
        error = np.sqrt(fit.covariance[4, 4])
        off.append((fit.parameters.base_residue - drawn.truth.base_residue) / error)
    # uncorrected, weights of 1/|measured|^2 at 10 % noise pull the size by about 1 %: 3 sigma here
    assert abs(np.mean(off)) < 1.5


@pytest.mark.parametrize(
    ("change", "place"),
    [
        ({"base": "wheel"}, "base"),
        ({"residues": "odd"}, "residues"),
        ({"modes": "some"}, "modes"),
        ({"modes": -1}, "modes"),
    ],
)
def test_unknown_options_are_refused(change, place):
    drawn = draw(np.random.default_rng(26), points=100)
    with pytest.raises(InputError, match=place):
        fit_modal_model(drawn.frequency, drawn.response, drawn.variance, **change)


def test_arrays_that_do_not_match_are_refused():
    drawn = draw(np.random.default_rng(27), points=100)
    with pytest.raises(InputError, match="increase"):
        fit_modal_model(drawn.frequency[::-1], drawn.response, drawn.variance)
    with pytest.raises(InputError, match="response"):
        fit_modal_model(drawn.frequency, drawn.response[:50], drawn.variance)


BATTERY = {
    "demo-like, 3 %": (Kind(weakest=0.005), 0.995),
    "demo-like, 8 %": (Kind(noise=0.08, weakest=0.02), 0.98),
    "close pairs": (Kind(close=True), 0.98),
    "free base": (Kind(base="free"), 0.99),
}


@pytest.mark.slow
@pytest.mark.parametrize("name", BATTERY)
def test_statistics_of_many_fits(name):
    """Found modes, error over the Cramer-Rao bound, coverage of 95 % intervals."""
    kind, least = BATTERY[name]
    rng, tally = np.random.default_rng(31), Tally()
    for _ in range(60):
        drawn = draw(rng, kind)
        fit = fit_modal_model(drawn.frequency, drawn.response, drawn.variance, base=kind.base)
        tally.count(drawn, fit)
    assert tally.found >= least * tally.wanted
    assert tally.extra <= 1
    stated, bound = np.array(tally.over_stated), np.array(tally.over_bound)
    # 400 modes: standard error of a root mean square 3.5 %, of a coverage 1.1 %
    assert np.sqrt(np.mean(bound[:, 0] ** 2)) < 1.12
    assert abs(np.mean(np.abs(stated[:, 0]) < 1.96) - 0.95) < 0.035


def test_request_is_not_changed_by_fitting():
    drawn = draw(np.random.default_rng(28), modes=3, points=200)
    before = replace(drawn, response=drawn.response.copy())
    fit_modal_model(drawn.frequency, drawn.response, drawn.variance)
    np.testing.assert_array_equal(before.response, drawn.response)
