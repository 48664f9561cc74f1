"""Sampled sets: plants behind a zero-order hold, reach up to half the rate."""

from dataclasses import replace

import control
import numpy as np
import pytest
from scipy.linalg import expm
from scipy.signal import cont2discrete

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set.claims import check_claims
from identkit.plant_set.interconnection import output_multiplicative
from identkit.plant_set.raw_points import judge_points
from identkit.plant_set.reach import Surroundings, as_continuous, folded, reach_of_plants
from identkit.plant_set.response import evaluation_points, state_space_response
from identkit.plant_set.sample import sampled, static
from identkit.plant_set.schur import plant_matrices
from identkit.plant_set.stacked import plants_at
from identkit.plant_set.zero_order_hold import held_terms, split_delay, transition

PERIOD = 2.5e-5
GRID = np.geomspace(50.0, 19_900.0, 60)


def held(plant):
    """scipy's zero-order hold of a plant without its delay."""
    m = plant_matrices(plant)
    a, b, c, d, _ = cont2discrete((m.A, m.B, m.C, m.D), PERIOD, method="zoh")
    return f.Matrices(a, b, c, d)


@pytest.mark.parametrize("base", ["pivot", "free", "none"])
@pytest.mark.parametrize("periods", [0.0, 1.0, 3.0])
def test_whole_delays_agree_with_scipy(makers, base, periods):
    plant = replace(makers.family(1, base=base)[0], delay=periods * PERIOD)
    plant = replace(plant, residue_rate=np.full((4, 1, 1), 20.0))
    z = evaluation_points(GRID, PERIOD)
    expected = state_space_response(held(plant), z)[0, 0] * z**-periods
    ours = plants_at([plant], GRID, PERIOD)[0, :, 0, 0]
    np.testing.assert_allclose(ours, expected, rtol=1e-9)


@pytest.mark.parametrize("periods", [0.3, 1.75])
def test_fractional_delays_agree_with_the_step_response(makers, periods):
    """y[k] = s(kT - tau) - s(kT - T - tau), s the step response by matrix exponentials."""
    plant = makers.family(1)[0]
    plant = replace(
        plant, delay=periods * PERIOD, damping_ratio=np.full(4, 0.1), base_damping_ratio=0.9
    )
    m = plant_matrices(plant)

    def step(time):
        """Response to a unit step, 0 before it."""
        if time <= 0.0:
            return 0.0
        grown = expm(m.A * time)
        held_state = np.linalg.solve(m.A, (grown - np.eye(len(m.A))) @ m.B)
        return float((m.C @ held_state + m.D)[0, 0])

    hops = int(0.06 / PERIOD)
    lag = periods % 1.0 * PERIOD
    whole = int(periods)
    # One exponential per hop instead of one per instant.
    state, hop = None, expm(m.A * PERIOD)
    steps = [0.0]
    start = PERIOD - lag
    grown = np.linalg.solve(m.A, (expm(m.A * start) - np.eye(len(m.A))) @ m.B)
    gain = np.linalg.solve(m.A, (hop - np.eye(len(m.A))) @ m.B)
    for _ in range(hops):
        state = grown if state is None else hop @ state + gain
        steps.append(float((m.C @ state + m.D)[0, 0]))
    assert steps[3] == pytest.approx(step(2 * PERIOD + start), rel=1e-9)
    pulse = np.diff(np.concatenate([[0.0], steps]))
    z = evaluation_points(GRID, PERIOD)
    expected = (pulse[:, None] * z[None] ** -np.arange(pulse.size)[:, None]).sum(axis=0)
    expected = expected * z**-whole
    ours = plants_at([plant], GRID, PERIOD)[0, :, 0, 0]
    np.testing.assert_allclose(ours, expected, rtol=1e-5, atol=1e-9 * np.abs(ours).max())


def test_every_damping_has_its_transition():
    """Under-, critically and overdamped, and the double integrator, against scipy's expm."""
    for natural, loss in [(9e3, 100.0), (9e3, 18e3), (9e3, 18e3 * (1 + 1e-9)), (9e3, 9e4), (0, 0)]:
        expected = expm(np.array([[0.0, 1.0], [-(natural**2), -loss]]) * PERIOD)
        ours = transition(np.array([float(natural)]), np.array([float(loss)]), np.array([PERIOD]))
        np.testing.assert_allclose(ours[..., 0], expected, rtol=1e-9)


def test_delays_are_split():
    whole, fraction = split_delay(np.array([0.0, 0.4, 2.0, 2.0 - 1e-12, -0.25]) * PERIOD, PERIOD)
    assert whole.tolist() == [0, 0, 2, 2, -1]
    np.testing.assert_allclose(fraction / PERIOD, [0, 0.4, 0, 0, 0.75], atol=1e-9)
    terms = held_terms(np.array([[9e3]]), np.array([[90.0]]), np.array([0.0]), PERIOD)
    assert np.all(terms.before == 0.0)


def test_a_mode_above_half_the_rate_folds():
    """26 kHz sampled at 40 kHz stands at 14 kHz."""
    pole = 2 * np.pi * 26_000.0 * (-0.01 + 1j * np.sqrt(1 - 1e-4))
    seen = folded(np.array([pole]), PERIOD)
    assert seen.imag[0] / (2 * np.pi) == pytest.approx(14_000.0, rel=1e-3)
    assert seen.real[0] == pytest.approx(pole.real, rel=1e-9)
    on_axis = as_continuous(np.array([-0.5 + 0.0j, 0.0j]), PERIOD)
    assert on_axis.size == 1
    assert on_axis.imag[0] == pytest.approx(np.pi / PERIOD)


@pytest.fixture(scope="module")
def sampled_set(makers):
    """The small set at 40 kHz: nominal held, weight by the bilinear rule, bounded afresh."""
    plants = [replace(p, delay=1.1e-5) for p in makers.family(8)]
    nominal = held(makers.nominal_plant())
    weight = sampled(makers.lead_weight(1.0), PERIOD)
    one = static(np.eye(1))
    contents = replace(
        makers.small(),
        time=f.TimeBase("sampled", PERIOD),
        band=(50.0, 19_900.0),
        nominal=f.Nominal(nominal.A, nominal.B, nominal.C, nominal.D),
        weights=f.Weights(weight, one),
        plants=tuple(plants),
    )
    largest = reach_of_plants(contents, plants).value.max()
    weight = replace(weight, C=weight.C * largest, D=weight.D * largest)
    contents = replace(
        contents,
        weights=f.Weights(weight, one),
        interconnection=output_multiplicative(contents.nominal, weight, one),
    )
    reach = reach_of_plants(contents, plants)
    listed = tuple(
        replace(plant, reach=float(value), reach_frequency=float(hertz))
        for plant, value, hertz in zip(plants, reach.value, reach.frequency, strict=True)
    )
    empty = np.zeros(0)
    measured = replace(contents.certificate.measured, setting=0)
    return replace(
        contents,
        plants=listed,
        radii=f.Radii(empty, empty, empty, (), empty, 0.02),
        certificate=replace(contents.certificate, measured=measured),
    )


def test_reach_is_never_below_a_dense_grid(sampled_set):
    grid = np.linspace(50.0, 19_900.0, 100_001)
    around = Surroundings(sampled_set)
    for plant in sampled_set.plants[:3]:
        there = plants_at([plant], grid, PERIOD)[0]
        slow = around.reach_at(grid, there).max()
        assert slow <= plant.reach * (1 + 1e-12)
        assert plant.reach == pytest.approx(slow, rel=1e-5)


def test_reach_is_the_norm_by_slycot(sampled_set, makers):
    """||W^-1 (P/P0 - 1)|| of sampled systems by slycot's ab13dd, whole band, no delay."""
    plant = replace(sampled_set.plants[0], delay=0.0)
    whole = replace(sampled_set, band=(1.0, 20_000.0))
    own, nominal, weight = (
        control.ss(part.A, part.B, part.C, part.D, PERIOD)
        for part in (held(plant), whole.nominal, whole.weights.left)
    )

    def inverse(system):
        d = np.linalg.inv(system.D)
        back = system.B @ d
        return control.ss(system.A - back @ system.C, back, -d @ system.C, d, PERIOD)

    error = (own - nominal) * inverse(nominal) * inverse(weight)
    norm, place = control.linfnorm(error, tol=1e-11)
    reach = reach_of_plants(whole, [plant])
    # slycot stops 2e-5 beside the peak, where the value is 1e-6 lower; ours is attained.
    assert 2 * np.pi * reach.frequency[0] == pytest.approx(place, rel=1e-4)
    assert norm <= reach.value[0] <= norm * (1.0 + 3e-6)
    there = abs(error(np.exp(2j * np.pi * reach.frequency[0] * PERIOD)))
    assert reach.value[0] == pytest.approx(there, rel=1e-8)


def test_claims_and_members_of_a_sampled_set(sampled_set):
    stated = [claim for claim in check_claims(sampled_set) if "order" not in claim.claim]
    assert stated == []
    grid = np.linspace(100.0, 19_000.0, 200)
    nominal = sampled_set.frequency_response(grid)[0, 0]
    z = evaluation_points(grid, PERIOD)
    weight = state_space_response(sampled_set.weights.left, z)[0, 0]
    for member in sampled_set.sample(20, seed=1):
        error = member.frequency_response(grid)[0, 0] / nominal - 1.0
        assert np.all(np.abs(error) <= np.abs(weight) * (1 + 1e-9))
        assert np.abs(np.linalg.eigvals(member.state_space().A)).max() < 1.0


def test_an_unstable_sampled_plant_or_weight_is_seen(sampled_set):
    bad = replace(sampled_set.plants[0], damping_ratio=-sampled_set.plants[0].damping_ratio)
    assert np.isinf(reach_of_plants(sampled_set, [bad]).value[0])
    left = sampled_set.weights.left
    weights = f.Weights(replace(left, A=np.linalg.inv(left.A)), sampled_set.weights.right)
    failures = check_claims(replace(sampled_set, weights=weights))
    assert any("a pole outside the circle" in str(failure) for failure in failures)


def test_points_of_sampled_responses_are_judged(sampled_set):
    grid = np.linspace(100.0, 19_000.0, 500)
    measured = plants_at(sampled_set.plants, grid, PERIOD)[:, :, 0, 0]
    judged = judge_points(sampled_set, grid, measured, None)
    assert set(judged.verdict) == {"held"}
    assert np.all(judged.reach <= [plant.reach for plant in sampled_set.plants])


def test_nothing_is_claimed_beyond_half_the_rate(sampled_set):
    with pytest.raises(InputError, match="half the rate, 20000 Hz"):
        reach_of_plants(replace(sampled_set, band=(50.0, 21_000.0)), sampled_set.plants)
