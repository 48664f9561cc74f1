"""Reach against norms of other libraries and against printed values."""

from dataclasses import replace

import control
import numpy as np
import pytest

from identkit.plant_set import fields as f
from identkit.plant_set.interconnection import output_multiplicative
from identkit.plant_set.peaks import clustered, even_grid, highest
from identkit.plant_set.pointwise import pointwise_reach
from identkit.plant_set.reach import reach_of_plants
from identkit.plant_set.response import evaluation_points
from identkit.plant_set.sample import static
from identkit.plant_set.schur import SchurResponse, plant_matrices

pytestmark = pytest.mark.outside


def peak(system: f.Matrices, band: tuple[float, float]) -> tuple[float, float]:
    response = SchurResponse(system)
    grid = np.sort(np.concatenate([even_grid(band), clustered(response.poles, band)]))[None]

    def evaluate(row: np.ndarray, frequency: np.ndarray) -> np.ndarray:
        return np.abs(response(evaluation_points(frequency))[:, 0, 0])

    value, place = highest(grid, evaluate(np.zeros(1), grid[0])[None], evaluate)
    return float(value[0]), float(place[0])


@pytest.mark.parametrize(
    ("damping", "norm", "place"),
    [
        (0.01, 50.00250019, 0.999899995),
        (0.1, 5.025189076, 0.989949494),
        (0.5, 1.154700538, 0.707106781),
    ],
)
def test_norm_of_a_second_order_lag(damping, norm, place):
    """Standard formula 1/(2 z sqrt(1-z^2)) at sqrt(1-2 z^2) (common practice)."""
    system = f.Matrices(
        np.array([[0.0, 1.0], [-1.0, -2.0 * damping]]),
        np.array([[0.0], [1.0]]),
        np.array([[1.0, 0.0]]),
        np.zeros((1, 1)),
    )
    value, where = peak(system, (1e-3, 10.0))
    assert value == pytest.approx(norm, abs=1e-7)
    assert 2 * np.pi * where == pytest.approx(place, abs=1e-5)


@pytest.mark.parametrize("count", range(4))
def test_reach_is_the_norm_by_slycot(small_set, make_family, count):
    """||W^-1 (P/P0 - 1)|| by the level-set method of slycot's ab13dd (Bruinsma & Steinbuch 1990).

    P/P0 is put in state space by feedback around the nominal, so nothing of the search is shared.
    """
    item = make_family(4, seed=20 + count, spread=0.02)[count]
    nominal = control.ss(*(getattr(small_set.nominal, name) for name in "ABCD"))
    weight = control.ss(*(getattr(small_set.weights.left, name) for name in "ABCD"))
    plant = control.ss(*(getattr(plant_matrices(item), name) for name in "ABCD"))

    def inverse(system: control.StateSpace) -> control.StateSpace:
        d = np.linalg.inv(system.D)
        return control.ss(system.A - system.B @ d @ system.C, system.B @ d, -d @ system.C, d)

    error = (plant - nominal) * inverse(nominal) * inverse(weight)
    scale = 2 * np.pi * 5000.0  # time in units near the modes, as ab13dd is not scaled inside
    error = control.ss(error.A / scale, error.B / scale, error.C, error.D)
    norm, place = control.linfnorm(error, tol=1e-11)
    reach = reach_of_plants(replace(small_set, band=(1.0, 100_000.0)), [item])
    assert reach.value[0] == pytest.approx(norm, rel=1e-6)
    assert 2 * np.pi * reach.frequency[0] == pytest.approx(place * scale, rel=1e-3)


def scalar_set(small_set, nominal: f.Matrices, weight: f.Matrices, band: tuple[float, float]):
    return replace(
        small_set,
        nominal=f.Nominal(nominal.A, nominal.B, nominal.C, nominal.D),
        weights=f.Weights(weight, static(np.eye(1))),
        interconnection=output_multiplicative(nominal, weight, static(np.eye(1))),
        band=band,
    )


def test_pure_delay_radius(small_set):
    """|e^{-jx} - 1| = 2 sin(x/2) up to x = pi, then 2 (Skogestad & Postlethwaite, sec. 7.4)."""
    late = f.FittedPlant(
        response="late",
        modal_frequency=np.zeros(0),
        damping_ratio=np.zeros(0),
        residue=np.zeros((0, 1, 1)),
        residue_rate=np.zeros((0, 1, 1)),
        base="none",
        base_gain=np.zeros((1, 1)),
        base_frequency=0.0,
        base_damping_ratio=0.0,
        base_residue=np.zeros((1, 1)),
        feedthrough=np.eye(1),
        delay=1.0,
    )
    one = static(np.eye(1))
    for x, radius in [
        (0.1, 0.0999583),
        (1.0, 0.9588511),
        (2.0, 1.682942),
        (np.pi, 2.0),
        (5.0, 2.0),
    ]:
        contents = scalar_set(small_set, one, one, (1e-4, x / (2 * np.pi)))
        assert reach_of_plants(contents, [late]).value[0] == pytest.approx(radius, abs=1e-6)


def test_the_first_order_delay_weight_does_not_cover(small_set):
    """theta s/(theta s/2 + 1): worst ratio 1.2157293 at w theta = 2.5711 (value from memory,

    Skogestad & Postlethwaite, *Multivariable Feedback Control*, sec. 7.4).
    """
    weight = f.Matrices(
        np.array([[-2.0]]), np.array([[1.0]]), np.array([[-4.0]]), np.array([[2.0]])
    )
    x = np.linspace(0.01, np.pi, 2000)
    error = np.exp(-1j * x)[:, None, None]
    one = np.ones_like(error)
    left = SchurResponse(weight)(1j * x)
    ratio = pointwise_reach("multiplicative", error, one, left, one)
    assert ratio.max() == pytest.approx(1.2157293, abs=2e-6)
    assert x[ratio.argmax()] == pytest.approx(2.5711, abs=2e-3)


def test_time_constant_uncertainty_is_exactly_inverse_multiplicative():
    """tau = 2 (1 + 0.25 d): weight 0.5 s/(1 + 2 s) holds it with reach |d| (S & P, sec. 7.4)."""
    s = 1j * np.geomspace(0.01, 100.0, 50)[:, None, None]
    nominal = 1.0 / (1.0 + 2.0 * s)
    weight = 0.5 * s / (1.0 + 2.0 * s)
    for d in (-1.0, 0.4, 1.0):
        plant = 1.0 / (1.0 + 2.0 * (1.0 + 0.25 * d) * s)
        reach = pointwise_reach("inverse-multiplicative", plant, nominal, weight, np.ones_like(s))
        np.testing.assert_allclose(reach, abs(d), rtol=1e-9)
