import numpy as np
import pytest

from identkit.methods.bounded_real_norm import band_norm, level_frequencies
from identkit.methods.state_space import StateSpace, frequency_response, modal_realisation
from tests.methods.families import plant


def random_system(rng: np.random.Generator, modes: int, ports: int = 2) -> StateSpace:
    natural = 2.0 * np.pi * np.exp(rng.uniform(np.log(50.0), np.log(2e4), modes))
    damping = 10.0 ** rng.uniform(-3.5, -1.0, modes)
    a = np.zeros((2 * modes, 2 * modes))
    for k, (w, z) in enumerate(zip(natural, damping, strict=True)):
        a[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0.0, w], [-w, -2.0 * z * w]]
    size = np.repeat(np.sqrt(natural * damping), 2)
    return StateSpace(
        a, rng.normal(size=(2 * modes, ports)) * size[:, None],
        rng.normal(size=(ports, 2 * modes)) * size, 0.1 * rng.normal(size=(ports, ports)),
    )  # fmt: skip


@pytest.mark.parametrize("seed", range(6))
def test_against_a_dense_grid_inside_the_band(seed: int) -> None:
    rng = np.random.default_rng(seed)
    system = random_system(rng, 6, ports=1 + seed % 2)
    low, high = 300.0, 5000.0
    found = band_norm(system, low, high)
    grid = np.geomspace(low, high, 60001)
    gains = np.linalg.norm(frequency_response(system, grid), 2, axis=(1, 2))
    assert found.norm >= gains.max() * (1.0 - 1e-12)
    assert found.norm == pytest.approx(gains.max(), rel=1e-3)
    at_peak = frequency_response(system, np.array([found.frequency]))[0]
    assert np.linalg.norm(at_peak, 2) == pytest.approx(found.norm, rel=1e-12)
    assert low <= found.frequency <= high


def test_band_excludes_a_larger_peak_outside() -> None:
    system = modal_realisation(plant(base="none"))
    whole = band_norm(system, 10.0, 20e3)
    part = band_norm(system, 2000.0, 3000.0)
    assert part.norm < whole.norm
    assert part.frequency == pytest.approx(2500.0, rel=1e-3)


def test_level_frequencies_bracket_where_the_gain_crosses() -> None:
    system = modal_realisation(plant(base="none"))
    edges = level_frequencies(system, 0.5)
    gain = np.abs(frequency_response(system, edges)[:, 0, 0])
    np.testing.assert_allclose(gain, 0.5, rtol=1e-6)


def test_unit_of_time_and_of_signals_do_not_matter() -> None:
    system = modal_realisation(plant())
    scaled = StateSpace(system.A / 1e3, system.B * 1e6 / 1e3, system.C, system.D * 1e6)
    one, two = band_norm(system, 100.0, 2e4), band_norm(scaled, 0.1, 20.0)
    assert two.norm == pytest.approx(1e6 * one.norm, rel=1e-10)
    assert two.frequency == pytest.approx(one.frequency / 1e3, rel=1e-6)


def test_pole_on_the_axis_is_refused() -> None:
    undamped = StateSpace(
        np.array([[0.0, 1.0], [-1.0, 0.0]]), np.eye(2)[:, 1:], np.eye(2)[:1], np.zeros((1, 1))
    )
    with pytest.raises(ArithmeticError, match="axis"):
        band_norm(undamped, 0.01, 10.0)
