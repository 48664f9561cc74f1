import numpy as np
import pytest

from identkit.methods.burst_decoding import (
    beyond_range,
    bursts,
    decode_bursts,
    follow_position,
    linearised,
    measure_linearity,
)
from identkit.methods.hold_division import hold_response, image_bound
from identkit.methods.repeatable_runout import TurnAverager, harmonic_lines, without_turn


def test_positions_are_followed_over_many_tracks():
    position = 7.3 * np.sin(np.linspace(0, 20, 3000))
    np.testing.assert_allclose(follow_position(decode_bursts(*bursts(position))), position)


def test_track_numbers_place_the_position_without_history():
    generator = np.random.default_rng(1)
    position = generator.uniform(-50, 50, 1000)
    coarse = position + generator.uniform(-0.9, 0.9, 1000)
    found = follow_position(decode_bursts(*bursts(position)), coarse)
    np.testing.assert_allclose(found, position, atol=1e-9)


def test_a_sweep_measures_and_removes_the_non_linearity():
    """Rounded bursts of unequal gain: the error falls by more than ten."""

    def rounded(position):
        n, q = bursts(position)
        return 0.46 * np.sin(np.pi * n) / np.sin(np.pi / 4) * 0.5, 0.44 * np.sin(np.pi * q) * 0.7

    sweep = np.linspace(0.0, 400.0, 200_000, endpoint=False)
    table = measure_linearity(decode_bursts(*rounded(sweep)))
    position = np.random.default_rng(2).uniform(0.0, 2.0, 5000)
    raw = decode_bursts(*rounded(position))

    def error(found):
        return np.sqrt(np.mean((np.mod(found - position + 1.0, 2.0) - 1.0) ** 2))

    assert error(linearised(raw, table)) < 0.1 * error(raw)


def test_a_short_sweep_is_refused():
    with pytest.raises(ValueError, match="100 samples"):
        measure_linearity(np.zeros(100))


def test_samples_beyond_the_range_and_missing_ones_are_marked():
    marked = beyond_range(np.array([0.0, 0.5, -0.51, np.nan]), 0.5)
    assert marked.tolist() == [False, False, True, True]


def test_runout_is_removed_to_what_averaging_leaves():
    generator = np.random.default_rng(3)
    turn, noise = generator.standard_normal((2, 40)), generator.standard_normal((2, 4000))
    record = np.tile(turn, 100) + 0.1 * noise + 3.0
    averager = TurnAverager(2, 40)
    for part in np.split(record, [7, 1003], axis=1):
        averager.add(part)
    assert averager.turns == 100
    left = without_turn(record[:, 1003:], averager.mean(), 1003)
    assert left.std(axis=1) == pytest.approx([0.1 * np.sqrt(0.99)] * 2, rel=0.05)
    assert left.mean(axis=1) == pytest.approx(3.0 + turn.mean(axis=1), abs=0.1)


def test_missing_samples_do_not_spoil_the_mean_turn():
    record = np.tile(np.arange(4.0), 5)[None]
    record[0, 6] = np.nan
    averager = TurnAverager(1, 4)
    averager.add(record)
    np.testing.assert_allclose(averager.mean(), [[-1.5, -0.5, 0.5, 1.5]])
    assert averager.turns == 4


def test_harmonics_are_marked():
    marked = harmonic_lines(np.arange(0.0, 500.0, 10.0), 120.0, 6.0)
    assert np.flatnonzero(marked).tolist() == [12, 24, 36, 48]


def sampled_and_continuous(frequency, period, poles=(0.0, 900.0)):
    """Samples of 1/((s + a)(s + b)) behind a hold, and the plant itself."""
    from scipy.signal import cont2discrete, dfreqresp, dlti

    a, b = (2 * np.pi * p for p in poles)
    numerator, denominator = [1e10], np.poly([-a, -b])
    discrete = cont2discrete((numerator, denominator), period)
    w = 2 * np.pi * frequency
    _, sampled = dfreqresp(dlti(discrete[0][0][1:], discrete[1], dt=period), w * period)
    return sampled, 1e10 / np.polyval(denominator, 1j * w)


def test_what_dividing_the_hold_leaves_is_within_the_bound():
    period = 1 / 50_400
    frequency = np.linspace(50.0, 25_000.0, 500)
    sampled, truth = sampled_and_continuous(frequency, period)
    divided = sampled / hold_response(frequency, period)
    error = np.abs(divided - truth)
    bound = image_bound(frequency, divided, period)
    assert np.all(error <= bound)
    assert np.median(bound / error) < 6.0


def test_a_delay_is_divided_out_too():
    frequency = np.array([100.0, 1000.0])
    ratio = hold_response(frequency, 1e-4, 3e-5) / hold_response(frequency, 1e-4)
    np.testing.assert_allclose(ratio, np.exp(-2j * np.pi * frequency * 3e-5))
