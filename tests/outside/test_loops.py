"""Margins and allowed bandwidth against published examples and the python-control library."""

import numpy as np
import pytest

control = pytest.importorskip("control")

from identkit.methods.allowed_bandwidth import Unremovable, allowed_bandwidth  # noqa: E402
from identkit.methods.stability_margins import margins_of_loop  # noqa: E402
from identkit.methods.state_space import StateSpace  # noqa: E402

pytestmark = pytest.mark.outside
S = control.tf("s")


def matrices(system):
    system = control.ss(system)
    return StateSpace(system.A, system.B, system.C, system.D)


def test_inverse_response_process_under_proportional_control():
    """S. Skogestad and I. Postlethwaite, *Multivariable Feedback Control*, example 2.1 (values
    from memory): ultimate gain 2.5, ultimate period 15.2 s."""
    found = margins_of_loop(matrices(3 * (-2 * S + 1) / ((5 * S + 1) * (10 * S + 1))))
    assert found.gain_up == pytest.approx(2.5, rel=1e-9)
    assert 1.0 / found.gain_up_frequency == pytest.approx(15.2, abs=0.05)


def test_inverse_response_process_under_proportional_integral_control():
    """The same book, section 2.4.3 (values from memory): GM 1.63, PM 19.4 degrees, peak of the
    sensitivity 3.92, delay margin 1.44 s, with the gain 2.5/2.2 and the integral time 15.2/1.2."""
    controller = 2.5 / 2.2 * (1 + 1.2 / (15.2 * S))
    loop = 3 * (-2 * S + 1) / ((5 * S + 1) * (10 * S + 1)) * controller
    found = margins_of_loop(matrices(loop))
    assert found.gain_up == pytest.approx(1.63, abs=0.01)
    assert found.phase == pytest.approx(19.4, abs=0.1)
    assert 1.0 / found.modulus == pytest.approx(3.92, abs=0.01)
    assert found.delay == pytest.approx(1.44, abs=0.02)


def test_disk_margin_of_a_published_loop():
    """P. Seiler, A. Packard, P. Gahinet, IEEE Control Systems Magazine 40(5), 2020, for
    25/(s^3 + 10 s^2 + 10 s + 10) (values from memory): alpha 0.46, gains 0.63 to 1.59, phase 26
    degrees; classical margins 3.6 and 29.1 degrees."""
    found = margins_of_loop(matrices(25 / (S**3 + 10 * S**2 + 10 * S + 10)))
    assert found.disk == pytest.approx(0.46, abs=0.005)
    assert (2 - found.disk) / (2 + found.disk) == pytest.approx(0.63, abs=0.005)
    assert (2 + found.disk) / (2 - found.disk) == pytest.approx(1.59, abs=0.01)
    assert 2 * np.degrees(np.arctan(found.disk / 2)) == pytest.approx(26.0, abs=0.3)
    assert found.gain_up == pytest.approx(3.6, abs=0.01)
    assert found.phase == pytest.approx(29.1, abs=0.05)


@pytest.mark.parametrize("seed", range(8))
def test_margins_of_random_resonant_loops(seed):
    generator = np.random.default_rng(seed)
    loop = control.tf(1.0, [1.0, 3.0])
    for natural in np.exp(generator.uniform(0.0, 5.0, 3)):
        ratio = float(np.exp(generator.uniform(-4.0, 0.0)))
        top = [float(generator.uniform(0.2, 1.0)), natural, natural**2]
        loop = loop * control.tf(top, [1.0, 2 * ratio * natural, natural**2])
    loop = control.ss(loop * float(np.exp(generator.uniform(-1.0, 3.0))))
    # every crossing, the least modulus and the smallest factors, by the library
    gains, phases, modulus, at_gain, at_phase, at_modulus = control.stability_margins(
        loop, returnall=True
    )
    found = margins_of_loop(matrices(loop))
    up, down = gains[gains >= 1.0], gains[gains < 1.0]
    assert found.gain_up == pytest.approx(up.min() if up.size else np.inf, rel=1e-6)
    assert found.gain_down == pytest.approx(down.max() if down.size else 0.0, rel=1e-6)
    if phases.size:
        wrapped = np.abs((phases + 180.0) % 360.0 - 180.0)
        assert found.phase == pytest.approx(wrapped.min(), rel=1e-6)
        assert found.crossover == pytest.approx(at_phase.max() / (2 * np.pi), rel=1e-6)
    peak, _ = control.linfnorm(control.feedback(1, loop), tol=1e-10)
    assert found.modulus == pytest.approx(1.0 / peak, rel=1e-6)
    if modulus.size:
        assert found.modulus <= modulus.min() * (1 + 1e-9)


def test_allowed_bandwidth_by_the_norm_of_w_t():
    """The norm of W T passes 1 at the w0 found, for a weight with a resonance."""
    weight = control.ss(
        0.2
        * (S + 500.0)
        / (S + 4000.0)
        * (S**2 + 900.0 * S + 9e6)
        / (S**2 + 60.0 * S + 9e6)
        * (S / 300.0 + 1.0)
        / (S / 2e4 + 1.0)
    )

    def size(frequency):
        return np.abs(weight(2j * np.pi * frequency, squeeze=True)) * np.ones(frequency.shape)

    grid = np.unique(
        np.concatenate(
            [np.geomspace(1e-2, 1e6, 1500), 3000 / (2 * np.pi) + np.linspace(-60, 60, 241)]
        )
    )
    found = allowed_bandwidth(size, grid, Unremovable(delay=2e-5))
    for share, above in ((1.0 - 1e-5, False), (1.0 + 1e-5, True)):
        w = 2 * np.pi * found.natural_frequency * share
        t = w**2 / (S**2 + np.sqrt(2.0) * w * S + w**2)
        norm, _ = control.linfnorm(weight * control.ss(t), tol=1e-10)
        assert (norm > 1.0) == above
