"""Margins against loops whose margins are known in closed form."""

import numpy as np
import pytest

from identkit.controller import state_space_of_roots
from identkit.methods.stability_margins import margins_from_response, margins_of_loop
from identkit.methods.state_space import StateSpace

TWO_PI = 2.0 * np.pi


def loop(poles, gain, zeros=()):
    return state_space_of_roots(
        np.array(zeros, dtype=complex), np.array(poles, dtype=complex), gain
    )


def test_three_poles():
    """1000/(s (s + 10)(s + 20)): -180 degrees at sqrt(200) rad/s, where |L| = 1000/6000."""
    found = margins_of_loop(loop([0.0, -10.0, -20.0], 1000.0))
    assert found.gain_up == pytest.approx(6.0, rel=1e-10)
    assert found.gain_up_frequency * TWO_PI == pytest.approx(np.sqrt(200.0), rel=1e-10)
    assert found.gain_down == 0.0
    w = found.crossover * TWO_PI
    assert 1000.0 / (w * np.hypot(w, 10) * np.hypot(w, 20)) == pytest.approx(1.0, rel=1e-9)
    expected = 90.0 - np.degrees(np.arctan(w / 10) + np.arctan(w / 20))
    assert found.phase == pytest.approx(expected, rel=1e-9)
    assert found.delay == pytest.approx(np.radians(expected) / w, rel=1e-9)


def test_an_integrator_with_delay():
    """k e^{-s tau}/s: gain margin pi/(2 k tau), phase margin 90 deg - k tau, at k rad/s."""
    k, tau = 300.0, 1e-3
    found = margins_of_loop(loop([0.0], k), tau)
    assert found.gain_up == pytest.approx(np.pi / (2 * k * tau), rel=1e-9)
    assert found.phase == pytest.approx(90.0 - np.degrees(k * tau), rel=1e-9)
    assert found.delay == pytest.approx((np.pi / 2 - k * tau) / k, rel=1e-9)


def test_a_loop_that_needs_its_gain():
    """k/(s - 1): stable above k = 1, so k may fall by the factor 1/k; |1 + L| least at rest."""
    found = margins_of_loop(loop([1.0], 4.0), low=1e-7)
    at_rest = margins_from_response(
        lambda f: 4.0 / (2j * np.pi * f - 1.0), np.geomspace(1e-6, 1e3, 400)
    )
    # L is on the real axis at rest only; the search stays above it
    assert found.gain_down in (0.0, pytest.approx(0.25, rel=1e-6))
    assert at_rest.modulus == pytest.approx(1.0, rel=1e-6)
    assert found.phase == pytest.approx(at_rest.phase, rel=1e-9)


def test_an_unstable_pole_with_a_lead_has_both_gain_margins():
    """k (s + 1)^2/s^3: -180 degrees at 1 rad/s with |L| = 2 k, so k may fall to 1/2."""
    found = margins_of_loop(loop([0.0, 0.0, 0.0], 5.0, [-1.0, -1.0]))
    assert found.gain_down == pytest.approx(0.1, rel=1e-9)
    assert found.gain_down_frequency * TWO_PI == pytest.approx(1.0, rel=1e-9)
    assert found.gain_up == np.inf


def test_a_narrow_resonance_is_not_missed():
    """A resonance 0.01 % wide that comes within 1e-3 of -1."""
    natural, ratio = 2000.0, 5e-5
    pole = natural * complex(-ratio, np.sqrt(1 - ratio**2))
    # real part of the peak residue: L = -0.999 at the resonance on top of nothing
    system = loop([pole, pole.conjugate()], -0.999 * 2 * ratio * natural, [0.0])
    found = margins_of_loop(system)
    assert found.modulus == pytest.approx(1e-3, rel=1e-6)
    assert found.modulus_frequency * TWO_PI == pytest.approx(natural, rel=1e-5)
    assert found.gain_up == pytest.approx(1.0 / 0.999, rel=1e-6)


def test_a_loop_below_one_has_no_phase_margin():
    found = margins_of_loop(loop([-1.0], 0.5))
    assert found.phase == np.inf
    assert np.isnan(found.crossover)


def test_modulus_and_disk_of_a_loop_without_states():
    none = np.zeros((0, 0))
    system = StateSpace(none, np.zeros((0, 1)), np.zeros((1, 0)), np.array([[0.5]]))
    found = margins_of_loop(system)
    assert found.modulus == pytest.approx(1.5)
    assert found.disk == pytest.approx(2 * 1.5 / 0.5)
