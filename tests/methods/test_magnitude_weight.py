import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from identkit.errors import InfeasibleError, InputError
from identkit.methods.magnitude_weight import fit_magnitude_weight

TWO_PI = 2.0 * np.pi


def log_grid(points=400, low=10.0, high=2e4):
    return np.geomspace(low, high, points)


def delay_radius(frequency):
    return np.maximum(0.02, 2.0 * np.sin(np.minimum(frequency * 2e-4, np.pi) / 2.0))


def resonant_radius(frequency):
    peaks = [(3.0, 90.0), (5.0, 700.0), (2.0, 3000.0), (8.0, 11000.0)]
    terms = [
        0.01 * a / np.hypot(1.0 - (frequency / f) ** 2, 0.01 * frequency / f) for a, f in peaks
    ]
    return 0.01 + sum(terms)


def kinked_radius(frequency):
    knots = np.log([10.0, 60.0, 300.0, 2000.0, 5000.0, 2e4])
    return np.exp(np.interp(np.log(frequency), knots, [-3.5, -2.0, 0.5, -1.0, 1.5, 2.0]))


RADII = {"delay": delay_radius, "resonant": resonant_radius, "kinked": kinked_radius}


def state_space_magnitude(weight, frequency):
    a, b, c, d = weight.state_space()
    identity = np.eye(a.shape[0])
    return np.array(
        [abs((c @ np.linalg.solve(1j * w * identity - a, b) + d)[0, 0]) for w in TWO_PI * frequency]
    )


@pytest.mark.parametrize("order", [0, 1, 2, 3, 5, 8, 12, 16])
@pytest.mark.parametrize("name", RADII)
def test_weight_covers_and_is_certified(name, order):
    frequency = log_grid()
    radius = RADII[name](frequency)
    weight = fit_magnitude_weight(frequency, radius, order)
    share = weight.magnitude(frequency) / radius
    assert share.min() >= 1.0
    assert 20.0 * np.log10(share.max()) <= weight.excess_db + 1e-9
    assert weight.floor_db <= weight.excess_db
    assert weight.gap_db <= 0.02
    assert weight.least_damping >= 0.002 * (1.0 - 1e-9)
    assert weight.poles.size == weight.zeros.size <= order
    assert np.all(weight.poles.real < 0.0)
    assert np.all(weight.zeros.real < 0.0)
    np.testing.assert_allclose(
        state_space_magnitude(weight, frequency[::20]), weight.magnitude(frequency[::20]), rtol=1e-9
    )


@pytest.mark.parametrize("name", RADII)
def test_excess_falls_with_order(name):
    frequency = log_grid()
    radius = RADII[name](frequency)
    excess = [fit_magnitude_weight(frequency, radius, n).excess_db for n in (0, 1, 2, 4, 8)]
    assert np.all(np.diff(excess) <= 0.02)


def test_constant_weight_is_the_largest_radius():
    weight = fit_magnitude_weight(np.array([1.0, 2.0, 5.0]), np.array([0.5, 0.2, 0.4]), 0)
    assert weight.gain == pytest.approx(0.5, rel=1e-9)
    assert weight.excess_db == pytest.approx(20.0 * np.log10(2.5), abs=1e-6)
    assert weight.gap_db == pytest.approx(0.0, abs=1e-6)


@pytest.mark.parametrize("order", [1, 2, 4])
def test_radius_that_is_a_weight_of_the_order_is_met(order):
    frequency = log_grid()
    s = 2j * np.pi * frequency
    radius = np.ones(frequency.size)
    for k in range(order):
        corner = TWO_PI * 50.0 * 6.0**k
        radius = radius * np.abs((s + 3.0 * corner) / (s + corner)) * 0.5
    weight = fit_magnitude_weight(frequency, radius, order)
    assert weight.excess_db <= 0.02
    assert fit_magnitude_weight(frequency, radius, order - 1).floor_db > 0.05


def test_result_does_not_depend_on_units_or_order_of_points():
    frequency = log_grid(300)
    radius = kinked_radius(frequency)
    weight = fit_magnitude_weight(frequency, radius, 4)
    shuffled = np.random.default_rng(0).permutation(300)
    other = fit_magnitude_weight(frequency[shuffled] / 1e3, 1e4 * radius[shuffled], 4)
    assert other.excess_db == pytest.approx(weight.excess_db, abs=0.02)
    np.testing.assert_allclose(other.gain, 1e4 * weight.gain, rtol=5e-3)


def test_profile_shapes_the_excess():
    frequency = log_grid()
    radius, profile = resonant_radius(frequency), np.interp(frequency, [100.0, 5000.0], [1.0, 10.0])
    weight = fit_magnitude_weight(frequency, radius, 6, profile=profile)
    share = weight.magnitude(frequency) / (radius * profile)
    assert 20.0 * np.log10(share.max()) == pytest.approx(weight.excess_db, abs=1e-6)
    flat = fit_magnitude_weight(frequency, radius, 6)
    low = frequency < 100.0
    share_low = weight.magnitude(frequency[low]) / radius[low]
    flat_low = flat.magnitude(frequency[low]) / radius[low]
    assert share_low.max() < flat_low.max()
    assert weight.gap_db <= 0.02


def test_cap_is_kept_and_costs_excess():
    frequency = log_grid()
    radius = delay_radius(frequency)
    free = fit_magnitude_weight(frequency, radius, 2)
    cap = np.where(frequency < 15.0, 0.0205, np.inf)
    capped = fit_magnitude_weight(frequency, radius, 2, cap=cap)
    assert np.all(capped.magnitude(frequency) <= cap * (1.0 + 1e-6))
    assert np.all(capped.magnitude(frequency) >= radius)
    assert capped.excess_db > free.excess_db
    assert capped.gap_db <= 0.02


def test_ceiling_limits_frequencies_without_radius():
    frequency = log_grid(300, 100.0, 2e4)
    radius = delay_radius(frequency)
    free = fit_magnitude_weight(frequency, radius, 2)
    places = np.array([0.0, 1.0, 30.0])
    ceiling = (places, 0.7 * free.magnitude(places))
    weight = fit_magnitude_weight(frequency, radius, 2, ceiling=ceiling)
    assert np.all(weight.magnitude(places) <= ceiling[1] * (1.0 + 1e-6))
    assert np.all(weight.magnitude(frequency) >= radius)
    assert weight.gap_db <= 0.02


def test_impossible_cap_names_the_frequency():
    frequency = log_grid(200)
    radius = delay_radius(frequency)
    with pytest.raises(InfeasibleError, match="is below the radius") as caught:
        fit_magnitude_weight(frequency, radius, 2, cap=np.where(frequency > 1e4, 1.5, np.inf))
    assert caught.value.frequency > 1e4
    with pytest.raises(InfeasibleError, match="there is no weight of order 1") as caught:
        fit_magnitude_weight(frequency, radius, 1, cap=1.05 * radius)
    assert frequency[0] <= caught.value.frequency <= frequency[-1]
    with pytest.raises(InfeasibleError, match="there is no weight of order 0"):
        fit_magnitude_weight(frequency, radius, 0, cap=1.05 * radius)


def test_damping_floor_holds_and_says_what_it_costs():
    frequency = log_grid(1200)
    radius = resonant_radius(frequency)
    free = fit_magnitude_weight(frequency, radius, 8)
    damped = fit_magnitude_weight(frequency, radius, 8, damping_floor=0.02)
    assert damped.least_damping >= 0.02 * (1.0 - 1e-9)
    assert damped.damping_cost_db > 1.0
    assert damped.floor_db == pytest.approx(free.floor_db, abs=0.03)
    assert damped.excess_db - damped.damping_cost_db == pytest.approx(free.excess_db, abs=0.03)


def test_warm_restart_with_added_points():
    frequency = log_grid(300)
    weight = fit_magnitude_weight(frequency, kinked_radius(frequency), 6)
    more = np.append(frequency, np.geomspace(290.0, 310.0, 21))
    cold = fit_magnitude_weight(more, kinked_radius(more), 6)
    warm = fit_magnitude_weight(more, kinked_radius(more), 6, start=weight)
    assert warm.excess_db == pytest.approx(cold.excess_db, abs=0.02)
    assert warm.gap_db <= 0.02


def test_weight_outside_the_points_stays_near_its_ends():
    frequency = log_grid(300)
    weight = fit_magnitude_weight(frequency, delay_radius(frequency), 3)
    allowed = 10.0 * 10.0 ** (weight.excess_db / 20.0)
    assert weight.magnitude(np.array([0.0]))[0] <= allowed * 0.02 * (1.0 + 1e-6)
    assert weight.magnitude(np.array([np.inf]))[0] <= allowed * 2.0 * (1.0 + 1e-6)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"radius": np.ones(3)}, "radius: found 3 values"),
        ({"radius": np.zeros(20)}, "radius at 1 Hz: found 0"),
        ({"frequency_hz": -np.arange(1.0, 21.0)}, "frequency at -1 Hz"),
        ({"order": 10}, "at least 21 for order 10"),
        ({"order": -1}, "order: found -1"),
        ({"profile": np.full(20, np.nan)}, "profile at 1 Hz: found nan"),
        ({"cap": np.zeros(20)}, "cap at 1 Hz: found 0"),
        ({"ceiling": (np.ones(2), np.ones(1))}, "ceiling: found 1 values"),
        ({"ceiling": (np.ones(1), np.zeros(1))}, "ceiling: found a value out of range"),
    ],
)
def test_bad_input_is_named(changes, message):
    arguments = {"frequency_hz": np.arange(1.0, 21.0), "radius": np.ones(20), "order": 1}
    with pytest.raises(InputError, match=message):
        fit_magnitude_weight(**(arguments | changes))


def bumps(seed):
    rng = np.random.default_rng(seed)
    low = 10.0 ** rng.uniform(0.0, 2.0)
    frequency = np.geomspace(low, low * 10.0 ** rng.uniform(0.5, 4.0), rng.integers(40, 400))
    position = np.log(frequency / low)
    waves = [
        rng.standard_normal() * np.cos(2.0 * k * position + rng.uniform(0.0, 6.0)) / (1.0 + k)
        for k in range(1, 9)
    ]
    return frequency, np.exp(rng.uniform(0.1, 2.0) * sum(waves))


@settings(max_examples=25, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10_000), order=st.integers(0, 8))
def test_random_radii_are_covered_with_a_valid_floor(seed, order):
    frequency, radius = bumps(seed)
    weight = fit_magnitude_weight(frequency, radius, order)
    share = weight.magnitude(frequency) / radius
    assert share.min() >= 1.0
    assert 20.0 * np.log10(share.max()) <= weight.excess_db + 1e-9
    assert weight.excess_db >= weight.floor_db - 1e-9
    assert weight.gap_db <= 0.02 + weight.damping_cost_db
    assert weight.least_damping >= 0.002 * (1.0 - 1e-9)
