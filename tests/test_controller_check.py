"""Controllers on small sets, by other roads: direct responses, python-control, the worst block."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import cont2discrete

from identkit.controller import Controller, controller_from
from identkit.controller_check import check_controller, size_at, worst_block
from identkit.errors import InputError
from identkit.methods.bounded_real_norm import band_norm
from identkit.methods.feedback import bent, close_lower
from identkit.methods.state_space import StateSpace
from identkit.plant_loops import held_plant, listed_loops, virtual_loops
from identkit.plant_set import fields as f
from identkit.plant_set.interconnection import output_multiplicative
from identkit.plant_set.model import PlantSet
from identkit.plant_set.response import evaluation_points, plant_response, state_space_response
from identkit.plant_set.sample import sampled, static
from identkit.plant_set.schur import plant_matrices
from identkit.plant_set.stacked import plants_at

control = pytest.importorskip("control")

PERIOD = 2.5e-5
GRID = np.geomspace(50.0, 19_000.0, 400)


def shaped(plant_set, crossover, phase_ahead=3.0):
    """Integrator, lead and roll-off with |L| = 1 at the crossover (Hz)."""
    w = 2 * np.pi * crossover
    content = {
        "zeros": [-w / 10, -w / phase_ahead],
        "poles": [0.0, -phase_ahead * w, [-2.83 * w, 2.83 * w], [-2.83 * w, -2.83 * w]],
        "gain": 1.0,
    }
    raw = controller_from(content).system
    at = np.array([crossover])
    gain = abs(plant_set.frequency_response(at)[0, 0, 0] * respond(raw, at)[0])
    content["gain"] = 1.0 / float(gain)
    return controller_from(content)


def respond(system, frequency, period=0.0):
    return state_space_response(as_matrices(system), evaluation_points(frequency, period))[0, 0]


def as_matrices(system):
    return f.Matrices(system.A, system.B, system.C, system.D)


def test_the_loop_the_block_sees_is_minus_w_t(small_set):
    controller = shaped(small_set, 300.0)
    check = check_controller(small_set, controller, virtual=3)
    loop = small_set.frequency_response(GRID)[0, 0] * respond(controller.system, GRID)
    weight = state_space_response(small_set.weights.left, 2j * np.pi * GRID)[0, 0]
    expected = np.abs(weight * loop / (1 + loop))
    np.testing.assert_allclose(size_at(check.seen, GRID), expected, rtol=1e-7)
    assert check.robust.peak >= expected.max() * (1 - 1e-9)


def test_virtual_loops_are_those_of_the_drawn_members(small_set):
    controller = shaped(small_set, 250.0)
    members = small_set.sample(6, seed=2)
    found = virtual_loops(small_set, controller, members)
    system = controller.system
    k = control.ss(system.A, system.B, system.C, system.D)
    for row, member in enumerate(members):
        at = np.array([found.frequency[row]])
        loop = member.frequency_response(at)[0, 0] * respond(system, at)
        assert found.modulus[row] == pytest.approx(abs(1 + loop[0]), rel=1e-9)
        m = member.state_space()
        poles = control.feedback(control.ss(m.A, m.B, m.C, m.D) * k, 1).poles()
        assert found.stable[row] == (poles.real.max() < 0.0)
        assert found.decay[row] == pytest.approx(poles.real.max(), rel=1e-4)


def test_a_slow_loop_holds_and_a_fast_one_does_not(small_set):
    slow = check_controller(small_set, shaped(small_set, 100.0), virtual=20)
    assert slow.holds
    assert slow.robust.lost == ()
    assert slow.virtual.stable.all()
    assert slow.listed.stable.all()
    fast = check_controller(small_set, shaped(small_set, 700.0), virtual=20)
    assert not fast.holds


def test_the_worst_block_brings_the_loop_to_the_edge_of_stability(small_set):
    """Small-gain theorem: Delta = 1/peak destabilises just beyond, and not just before."""
    for crossover in (100.0, 250.0, 400.0):
        check = check_controller(small_set, shaped(small_set, crossover), virtual=0)
        if check.robust is None:
            continue
        block = worst_block(check)
        assert band_norm(block, 0.0, np.inf).norm == pytest.approx(1 / check.robust.peak, rel=1e-9)
        for share, stable in ((1.0 - 1e-4, True), (1.0 + 1e-4, False)):
            around = close_lower(
                check.seen, StateSpace(block.A, block.B, -share * block.C, -share * block.D)
            )
            assert (around.poles().real.max() < 0.0) == stable


def test_lost_intervals_are_where_w_t_is_above_one(small_set):
    check = check_controller(small_set, shaped(small_set, 350.0), virtual=0)
    assert check.robust is not None
    assert not check.robust.holds
    fine = np.geomspace(10.0, 50_000.0, 20_001)
    inside = np.zeros(fine.size, dtype=bool)
    for low, high in check.robust.lost:
        inside |= (fine > low) & (fine < high)
    np.testing.assert_array_equal(inside, size_at(check.seen, fine) >= 1.0)


@pytest.mark.parametrize("delay", [0.0, 1.3e-5, 4e-5])
def test_poles_of_listed_plants_by_python_control(small_set, delay):
    """Stable or not, and the distance to -1, against another library and a fine grid."""
    plants = [replace(plant, delay=delay) for plant in small_set.plants]
    fine = np.geomspace(20.0, 30_000.0, 60_001)
    for crossover in (200.0, 500.0, 1200.0):
        controller = shaped(small_set, crossover)
        found = listed_loops(small_set, controller, plants)
        assert found.settled.all()
        system = controller.system
        k = control.ss(system.A, system.B, system.C, system.D)
        for row, plant in enumerate(plants):
            m = plant_matrices(plant)
            p = control.ss(m.A, m.B, m.C, m.D)
            if delay:
                p = p * control.ss(control.tf(*control.pade(delay, 8)))
            poles = control.feedback(p * k, 1).poles()
            assert found.stable[row] == (poles.real.max() < 0.0)
            loop = plant_response(plant, fine)[0, 0] * respond(system, fine)
            least = np.abs(1 + loop).min()
            assert found.modulus[row] <= least * (1 + 1e-9)
            assert found.modulus[row] == pytest.approx(least, rel=1e-3, abs=2e-4)


def test_the_worst_is_an_unstable_plant_before_a_near_one(small_set):
    found = listed_loops(small_set, shaped(small_set, 400.0), small_set.plants)
    changed = replace(found, stable=np.arange(len(found.names)) != 2)
    assert changed.worst == 2
    assert found.worst == int(np.argmin(found.modulus))


@pytest.mark.parametrize("delay", [0.0, 0.4 * PERIOD, PERIOD, 2.7 * PERIOD, 3 * PERIOD])
@pytest.mark.parametrize("base", ["pivot", "free"])
def test_held_plants_have_the_response_of_the_sampled_plants(makers, delay, base):
    plant = replace(makers.family(1, base=base)[0], delay=delay)
    held = held_plant(plant_matrices(plant), delay, PERIOD)
    ours = respond(held, GRID, PERIOD)
    expected = plants_at([plant], GRID, PERIOD)[0, :, 0, 0]
    np.testing.assert_allclose(ours, expected, rtol=1e-7)


def sampled_set(makers):
    """The small set at a servo rate: nominal held exactly, weight by the bilinear rule."""
    plants = makers.family(6)
    continuous = plant_matrices(makers.nominal_plant())
    a, b, c, d, _ = cont2discrete(
        (continuous.A, continuous.B, continuous.C, continuous.D), PERIOD, method="zoh"
    )
    nominal, one = f.Matrices(a, b, c, d), static(np.eye(1))
    weight = sampled(makers.lead_weight(1.0), PERIOD)
    whole = makers._fields(plants, nominal, weight)
    return PlantSet(
        **{
            **vars(whole),
            "time": f.TimeBase("sampled", PERIOD),
            "band": (50.0, 19_900.0),
            "interconnection": output_multiplicative(nominal, weight, one),
        }
    )


def at_rate(controller):
    m = sampled(as_matrices(controller.system), PERIOD)
    return Controller(StateSpace(m.A, m.B, m.C, m.D), PERIOD, "servo")


def test_a_sampled_loop_against_direct_evaluation(makers):
    plant_set = sampled_set(makers)
    controller = at_rate(shaped(makers.small(), 250.0))
    check = check_controller(plant_set, controller, virtual=5)
    loop = plant_set.frequency_response(GRID)[0, 0] * respond(controller.system, GRID, PERIOD)
    weight = state_space_response(plant_set.weights.left, evaluation_points(GRID, PERIOD))[0, 0]
    seen = np.abs(weight * loop / (1 + loop))
    np.testing.assert_allclose(size_at(check.seen, bent(GRID, PERIOD)), seen, rtol=1e-6)
    p, k = (
        control.ss(m.A, m.B, m.C, m.D, PERIOD)
        for m in (plant_set.nominal, as_matrices(controller.system))
    )
    poles = control.feedback(p * k, 1).poles()
    assert check.nominal_stable == (np.abs(poles).max() < 1.0)
    assert check.decay == pytest.approx(np.log(np.abs(poles).max()) / PERIOD, rel=1e-5)
    fine = np.geomspace(20.0, 19_999.0, 40_001)
    loop = plant_set.frequency_response(fine)[0, 0] * respond(controller.system, fine, PERIOD)
    data = np.abs(loop), np.degrees(np.unwrap(np.angle(loop))), 2 * np.pi * fine
    gains, phases, *_ = control.stability_margins(data, returnall=True)
    assert check.margins.gain_up == pytest.approx(gains[gains > 1].min(), rel=1e-3)
    wrapped = np.abs((phases + 180.0) % 360.0 - 180.0)
    assert check.margins.phase == pytest.approx(wrapped.min(), rel=1e-3)
    for row, plant in enumerate(plant_set.plants):
        m = plant_matrices(plant)
        a, b, c, d, _ = cont2discrete((m.A, m.B, m.C, m.D), PERIOD, method="zoh")
        closed = control.feedback(control.ss(a, b, c, d, PERIOD) * k, 1).poles()
        assert check.listed.stable[row] == (np.abs(closed).max() < 1.0)
        assert check.listed.decay[row] == pytest.approx(
            np.log(np.abs(closed).max()) / PERIOD, rel=1e-4
        )


def test_a_delay_outside_the_nominal_counts(small_set):
    """The same loop with the delay in front of the controller as an all-pass."""
    delay = 2e-5
    late = replace(
        small_set, nominal=f.Nominal(*(getattr(small_set.nominal, n) for n in "ABCD"), delay=delay)
    )
    controller = shaped(small_set, 300.0)
    check = check_controller(late, controller, virtual=3)
    loop = late.frequency_response(GRID)[0, 0] * respond(controller.system, GRID)
    weight = state_space_response(small_set.weights.left, 2j * np.pi * GRID)[0, 0]
    np.testing.assert_allclose(
        size_at(check.seen, GRID), np.abs(weight * loop / (1 + loop)), rtol=1e-6
    )
    without = check_controller(small_set, controller, virtual=0)
    assert check.margins.delay == pytest.approx(without.margins.delay - delay, rel=1e-6)


def test_an_unstable_nominal_loop_asks_no_robustness(small_set):
    controller = controller_from({"zeros": [], "poles": [], "gain": -50.0})
    check = check_controller(small_set, controller, virtual=2)
    assert not check.nominal_stable
    assert check.robust is None
    assert not check.holds
    with pytest.raises(ValueError, match="unstable"):
        worst_block(check)


def test_what_does_not_fit_is_refused(small_set):
    controller = shaped(small_set, 100.0)
    with pytest.raises(InputError, match="a period of 2e-05 s"):
        check_controller(small_set, replace(controller, period=2e-5))
    wide = StateSpace(np.zeros((0, 0)), np.zeros((0, 2)), np.zeros((1, 0)), np.ones((1, 2)))
    with pytest.raises(InputError, match="2 inputs and 1 outputs"):
        check_controller(small_set, Controller(wide))
    with pytest.raises(InputError, match="form of the set"):
        check_controller(replace(small_set, form="parametric"), controller)
    feed = float(small_set.nominal.D[0, 0])
    lonely = controller_from({"zeros": [], "poles": [], "gain": -1.0 / feed})
    with pytest.raises(InputError, match="not well posed"):
        check_controller(small_set, lonely)
