"""Gains, norms and enclosing discs against closed forms and against an independent library."""

import numpy as np
import pytest

from identkit.methods.bounded_real_norm import band_norm
from identkit.methods.enclosing_disc import enclosing_disc
from identkit.methods.state_space import StateSpace

pytestmark = pytest.mark.outside


def oscillator(damping: float) -> StateSpace:
    """1/(s^2 + 2 z s + 1)."""
    return StateSpace(
        np.array([[0.0, 1.0], [-1.0, -2.0 * damping]]),
        np.array([[0.0], [1.0]]), np.array([[1.0, 0.0]]), np.zeros((1, 1)),
    )  # fmt: skip


@pytest.mark.parametrize(
    ("damping", "norm", "peak"),
    [
        (0.01, 50.00250019, 0.999899995),
        (0.1, 5.025189076, 0.989949494),
        (0.5, 1.154700538, 0.707106781),
    ],
)
def test_norm_and_peak_of_an_oscillator(damping: float, norm: float, peak: float) -> None:
    # Closed form 1/(2z sqrt(1-z^2)) at sqrt(1-2z^2): standard; formula from memory.
    found = band_norm(oscillator(damping), 0.0, 100.0)
    assert found.norm == pytest.approx(norm, abs=1e-7)
    # At a flat peak a norm known to 1e-8 pins the frequency to about its square root only.
    assert 2.0 * np.pi * found.frequency == pytest.approx(peak, abs=1e-4)


def test_bounded_real_levels() -> None:
    # The least gamma of the bounded-real inequality, Boyd, El Ghaoui, Feron & Balakrishnan, *Linear
    # Matrix Inequalities in System and Control Theory*, SIAM 1994, sec. 6.3.2; values computed.
    allpass = StateSpace(
        np.array([[-1.0]]), np.array([[1.0]]), np.array([[-2.0]]), np.array([[1.0]])
    )
    assert band_norm(oscillator(0.1), 0.0, np.inf).norm == pytest.approx(5.025189076, abs=1e-5)
    assert band_norm(allpass, 0.0, np.inf).norm == pytest.approx(1.0, abs=1e-5)


@pytest.mark.parametrize(
    ("interval", "centre", "radius"), [((2.0, 3.0), 2.5, 0.2), ((0.5, 2.0), 1.25, 0.6)]
)
def test_gain_interval(interval: tuple[float, float], centre: float, radius: float) -> None:
    # Skogestad & Postlethwaite, *Multivariable Feedback Control*, 2nd ed., 2005, sec. 7.4: relative
    # radius (kmax-kmin)/(kmax+kmin) about the mean gain (formula from memory).
    disc = enclosing_disc(np.linspace(*interval, 21)[:, None] + 0j)
    assert disc.centre[0] == pytest.approx(centre, abs=1e-9)
    assert disc.radius[0] == pytest.approx(radius, abs=1e-9)


@pytest.mark.parametrize("states", [4, 20, 42, 80])
@pytest.mark.parametrize("seed", [1, 2])
def test_norm_against_slycot(states: int, seed: int) -> None:
    slycot = pytest.importorskip("slycot")
    rng = np.random.default_rng(1000 * seed + states)
    modes = states // 2
    natural = 2.0 * np.pi * np.exp(rng.uniform(np.log(50.0), np.log(2e4), modes))
    damping = 10.0 ** rng.uniform(-3.0, -1.0, modes)
    a = np.zeros((states, states))
    for k, (w, z) in enumerate(zip(natural, damping, strict=True)):
        a[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0.0, w], [-w, -2.0 * z * w]]
    size = np.repeat(np.sqrt(natural * damping), 2)
    b = rng.normal(size=(states, 2)) * size[:, None]
    c = rng.normal(size=(2, states)) * size
    d = 0.1 * rng.normal(size=(2, 2))
    expected, peak = slycot.ab13dd(
        "C", "I", "N", "D", states, 2, 2, a, np.eye(states), b, c, d, tol=1e-10
    )
    found = band_norm(StateSpace(a, b, c, d), 0.0, np.inf)
    assert found.norm == pytest.approx(expected, rel=1e-8)
    assert 2.0 * np.pi * found.frequency == pytest.approx(peak, rel=1e-3)
