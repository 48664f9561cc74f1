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
from identkit.methods.hold_division import folded_frequency, hold_response

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
