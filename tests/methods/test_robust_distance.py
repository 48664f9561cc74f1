"""Robust scale, slope and distance from peers."""

import numpy as np
import pytest
from scipy.stats import norm

from identkit.methods.robust_distance import (
    dilate,
    median_and_scale,
    median_slope,
    reach_of_peers,
    rise_above_peers,
    standardised,
)


def test_half_the_sample_may_be_wild():
    rng = np.random.default_rng(1)
    value = rng.normal(5.0, 2.0, 2001)
    value[:900] = 1e6
    centre, scale = median_and_scale(value)
    assert 5.0 < centre < 12.0
    assert scale < 20.0


def test_missing_values_are_left_out():
    centre, scale = median_and_scale(np.array([[1.0, np.nan], [3.0, np.nan], [np.nan, np.nan]]))
    assert centre[0] == 2.0
    assert scale[0] == pytest.approx(1.4826, abs=1e-4)
    assert np.isnan(centre[1])
    assert np.isnan(scale[1])


def test_slope_is_exact_on_a_line_with_wild_points():
    x = np.linspace(-3.0, 4.0, 60)
    y = 2.5 * x - 1.0
    y[::5] += 1e3
    assert median_slope(x, y) == pytest.approx(2.5, abs=1e-9)
    assert median_slope(np.ones(4), np.arange(4.0)) == 0.0
    assert median_slope(np.ones(1), np.ones(1)) == 0.0


def test_many_points_use_a_selection_of_pairs():
    rng = np.random.default_rng(2)
    x = rng.uniform(size=3000)
    y = -0.7 * x + 0.1 * rng.normal(size=3000)
    assert median_slope(x, y, most_pairs=50_000) == pytest.approx(-0.7, abs=0.05)


def test_dilation_takes_the_largest_neighbour():
    value = np.array([0.0, 5.0, 0.0, 0.0, np.nan, np.nan, np.nan, 1.0])
    found = dilate(value, 1)
    assert found[:5].tolist() == [5.0, 5.0, 5.0, 0.0, 0.0]
    assert np.isnan(found[5])
    assert found[6:].tolist() == [1.0, 1.0]


def peaks(shift, places=400):
    """Return a log-magnitude curve with one resonance at a place."""
    place = np.arange(places)
    return 1.5 * np.exp(-0.5 * ((place - 200.0 - shift) / 3.0) ** 2)


def test_a_shifted_resonance_is_usual_and_an_additional_one_is_not():
    rng = np.random.default_rng(3)
    curves = np.array([peaks(rng.normal(0.0, 1.0)) for _ in range(24)])
    curves += 0.01 * rng.normal(size=curves.shape)
    curves[4] = peaks(4.0)
    curves[7] += np.roll(peaks(0.0), 60)
    error = np.full(curves.shape, 0.01)
    rise = rise_above_peers(curves, error, reach_of_peers(curves, sideways=3, own=1))
    assert rise[7] > 6.0
    assert np.delete(rise, 7).max() < 2.0


def test_own_error_excuses_and_unknown_places_say_nothing():
    curves = np.zeros((12, 50))
    curves[:, ::2] += 0.3 * np.random.default_rng(4).normal(size=(12, 25))
    curves[3, 20] = 9.0
    curves[5] = np.nan
    peers = reach_of_peers(curves, sideways=1, own=1)
    clear = rise_above_peers(curves, np.full(curves.shape, 1e-3), peers)
    noisy = rise_above_peers(curves, np.full(curves.shape, 4.0), peers)
    assert clear[3] > 10.0
    assert noisy[3] == 0.0
    assert np.isnan(clear[5])


def test_distances_are_in_robust_standard_deviations():
    normal = norm.ppf((np.arange(4001) + 0.5) / 4001)
    found = standardised(10.0 + 3.0 * normal, 10**9, 1e-6)
    assert found == pytest.approx(np.abs(normal), rel=2e-3, abs=1e-9)
    assert standardised(np.array([1.0, 1.0, 1.5]), 1, 0.1)[2] == pytest.approx(1.0)
