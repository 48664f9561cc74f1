"""Facts of head positioning and of sampling."""

import numpy as np
import pytest

from identkit.methods.burst_decoding import (
    bursts,
    decode_bursts,
    follow_position,
    servo_rate,
    track_pitch,
)
from identkit.methods.held_modal_model import held_response
from identkit.methods.hold_division import folded_frequency, hold_response
from identkit.methods.modal_model import ModalParameters

pytestmark = pytest.mark.outside


@pytest.mark.parametrize(
    ("density", "pitch"), [(1e5, 254.0), (2.5e5, 101.6), (3e5, 84.6666667), (5e5, 50.8)]
)
def test_track_pitch(density, pitch):
    """25.4 mm per inch, exactly."""
    assert track_pitch(density) == pytest.approx(pitch, abs=1e-6)


@pytest.mark.parametrize(("density", "budget"), [(3e5, 8.466667), (5e5, 5.08)])
def test_a_tenth_of_a_track(density, budget):
    """Three sigma within a tenth of a track: common practice."""
    assert 0.1 * track_pitch(density) == pytest.approx(budget, abs=1e-5)


@pytest.mark.parametrize(
    ("speed", "turns"),
    [(7000, 116.6667), (7200, 120), (10000, 166.6667), (15000, 250), (20000, 333.3333)],
)
def test_servo_rate(speed, turns):
    """Turns per second (common practice for the range of speeds) times sectors."""
    assert servo_rate(1, speed) == pytest.approx(turns, abs=1e-3)
    assert servo_rate(420, speed) == pytest.approx(420 * turns, rel=1e-5)


def test_position_from_ideal_quadrature_bursts():
    """Error-free over eight tracks; every linear segment is a quarter track to either side."""
    position = np.linspace(-3.999, 3.999, 4001)
    n, q = bursts(position)
    found = follow_position(decode_bursts(n, q), position + 0.3)
    np.testing.assert_allclose(found, position, atol=1e-9)
    assert np.minimum(np.abs(n), np.abs(q)).max() == pytest.approx(0.25, abs=1e-3)


@pytest.mark.parametrize(
    ("frequency", "rate", "seen"),
    [(31000, 26400, 4600), (50000, 26400, 2800), (41000, 50400, 9400), (60100, 50400, 9700)],
)
def test_folding(frequency, rate, seen):
    """Sampling theorem."""
    assert folded_frequency(np.array(frequency), rate) == pytest.approx(seen, abs=1e-9)


def test_hold_at_half_the_sampling_rate():
    """2 / pi, -3.9224 dB, and a delay of half a sample."""
    found = hold_response(np.array([0.5, 0.1]), 1.0)
    assert abs(found[0]) == pytest.approx(0.6366197724, abs=1e-6)
    assert 20 * np.log10(abs(found[0])) == pytest.approx(-3.9223975, abs=1e-6)
    assert np.angle(found[1]) == pytest.approx(-0.1 * np.pi, abs=1e-9)


def test_held_resonance():
    """Astrom & Wittenmark, Table 2.1 (value from memory): 1000 Hz, 2 % damping, 20 kHz."""
    w = 2 * np.pi * 1000.0
    one = ModalParameters(*(np.array([v]) for v in (1000.0, 0.02, w * w, 0.0)), "none")
    frequency = np.array([10.0, 999.0, 7000.0])
    z = np.exp(2j * np.pi * frequency / 20_000.0)
    numerator = 0.0487394495 * z + 0.0485350462
    expected = numerator / (z * z - 1.890237761 * z + 0.9875122565)
    np.testing.assert_allclose(held_response(frequency, one, 1 / 20_000), expected, rtol=1e-6)


def test_held_undamped_oscillator():
    """Astrom & Wittenmark, Table 2.1: 1/(s^2 + 1) at T = 0.5."""
    one = ModalParameters(*(np.array([v]) for v in (0.5 / np.pi, 0.0, 1.0, 0.0)), "none")
    z = np.exp(1j * np.array([0.1, 0.4, 1.3]))
    expected = 0.1224174381 * (z + 1.0) / (z * z - 1.755165124 * z + 1.0)
    found = held_response(np.array([0.1, 0.4, 1.3]) / np.pi, one, 0.5)
    np.testing.assert_allclose(found, expected, rtol=1e-8)


def test_held_double_integrator_with_a_fraction_of_delay():
    """Astrom & Wittenmark, section 2.3: T = 1, delay 0.3: 0.245, 0.7, 0.255, 0.3."""
    none = np.zeros(0)
    free = ModalParameters(none, none, none, none, "free", base_gain=1.0, delay=0.3)
    z = np.exp(2j * np.pi * np.array([0.05, 0.2, 0.45]))
    now, before = np.array([0.245, 0.7]), np.array([0.255, 0.3])
    expected = []
    for each in z:
        state = np.linalg.solve(each * np.eye(2) - [[1.0, 1.0], [0.0, 1.0]], now + before / each)
        expected.append(state[0])
    found = held_response(np.array([0.05, 0.2, 0.45]), free, 1.0)
    np.testing.assert_allclose(found, expected, rtol=1e-9)
