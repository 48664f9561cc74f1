"""Reach of families with uncertain gain and delay against textbook radii, exact delays."""

import numpy as np
import pytest

from identkit.forms.between_points import largest_ratio
from identkit.forms.bounding import BoundOptions, bound_plants
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.multiplicative import MULTIPLICATIVE, relative_errors
from identkit.forms.nominal_plant import NominalPlant
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import ModalParameters

pytestmark = pytest.mark.outside
THETA = 1e-4


def gain_and_delay(gain: float, delay: float) -> ModalParameters:
    none = np.zeros(0)
    return ModalParameters(none, none, none, none, "none", feedthrough=gain, delay=delay)


NOMINAL = NominalPlant(gain_and_delay(1.0, 0.0), 0)


@pytest.mark.parametrize(
    ("phase", "radius"),
    [(0.5, 0.5777559), (1.0, 1.0692401), (2.0, 1.8543874), (3.0, 2.1945346), (5.0, 2.2)],
)
def test_gain_and_delay(phase: float, radius: float) -> None:
    # Skogestad & Postlethwaite, *Multivariable Feedback Control*, 2nd ed., 2005, sec. 7.4: radius
    # sqrt(r^2 + 2(1+r)(1-cos x)) below x = pi, 2 + r above, r = 0.2 (formula from memory).
    frequency = np.array([phase / THETA / (2.0 * np.pi)])
    delays = THETA * np.append(np.linspace(0.0, 1.0, 400), np.pi / phase if phase > np.pi else 0.0)
    plants = [gain_and_delay(gain, delay) for gain in (0.8, 1.2) for delay in delays]
    found = np.abs(relative_errors(frequency, plants, NOMINAL)).max()
    assert found == pytest.approx(radius, abs=1e-4)


@pytest.mark.parametrize(
    ("phase", "radius"), [(0.1, 0.0999583), (1.0, 0.9588511), (2.0, 1.682942), (np.pi, 2.0)]
)
def test_pure_delay(phase: float, radius: float) -> None:
    # Same source: 2 sin(x/2) (formula from memory).
    frequency = np.array([phase / THETA / (2.0 * np.pi)])
    found = np.abs(relative_errors(frequency, [gain_and_delay(1.0, THETA)], NOMINAL))[0, 0]
    assert found == pytest.approx(radius, abs=1e-6)


def test_first_order_delay_weight_does_not_cover() -> None:
    # Same source: theta s/(theta s/2 + 1) falls short by a factor 1.2157293 at omega theta = 2.5711
    # (values computed from the formula). Found here between points, from a start far away.
    high = np.pi / THETA / (2.0 * np.pi)
    common = CommonPart(NOMINAL, 0.01 * high, high, MULTIPLICATIVE)
    weight = MagnitudeWeight(
        1, 0.0, 0.0, 0.0, 0.0, np.array([-2.0 / THETA + 0j]), np.zeros(1, dtype=complex), 2.0, 0
    )
    comparison = PlantComparison(gain_and_delay(1.0, THETA), common)
    found = largest_ratio(comparison, weight, 0.02 * high)
    assert found.ratio == pytest.approx(1.2157293, abs=2e-6)
    assert 2.0 * np.pi * found.frequency * THETA == pytest.approx(2.5711, abs=2e-3)


def test_bound_of_a_delay_family_lies_above_the_textbook_radius() -> None:
    high = 3.0 / THETA / (2.0 * np.pi)
    plants = [gain_and_delay(k, t) for k in (0.8, 1.2) for t in (0.0, 0.5 * THETA, THETA)]
    grid = np.geomspace(0.01 * high, high, 40)
    found = bound_plants(
        plants,
        CommonPart(NOMINAL, grid[0], high, MULTIPLICATIVE),
        grid,
        BoundOptions(order=3, profile=[(1, 1)]),
    )
    dense = np.geomspace(grid[0], high, 5000)
    x = 2.0 * np.pi * dense * THETA
    radius = np.sqrt(0.04 + 2.4 * (1.0 - np.cos(x)))
    ratio = found.weight.magnitude(dense) / radius
    assert ratio.min() >= 1.0 - 1e-7
    assert 20.0 * np.log10(ratio.max()) <= found.weight.excess_db + 1e-3
