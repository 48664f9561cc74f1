"""Inverse multiplicative sets: textbook family, level test between points, turns around zero."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.forms.between_points import largest_ratio
from identkit.forms.bounding import BoundOptions, bound_plants
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.inverse_multiplicative import INVERSE_MULTIPLICATIVE
from identkit.forms.nominal_plant import NominalPlant
from identkit.forms.radius_curve import interpolated
from identkit.methods.magnitude_weight import fit_magnitude_weight
from identkit.methods.modal_model import ModalParameters, modal_response
from tests.methods.families import family, plant

BAND = (50.0, 22e3)
PLANTS = family(8, 21)
COARSE = np.geomspace(*BAND, 300)
DENSE = np.geomspace(*BAND, 60001)
COMMON = CommonPart(NominalPlant(plant(), 3), *BAND, INVERSE_MULTIPLICATIVE)


def worst_on(frequency: np.ndarray, magnitude: np.ndarray) -> float:
    centre = COMMON.nominal.response(frequency)
    return max(
        float(np.max(np.abs(centre / modal_response(frequency, one) - 1.0) / magnitude))
        for one in PLANTS
    )


@pytest.fixture(scope="module")
def found():
    return bound_plants(PLANTS, COMMON, COARSE, BoundOptions(order=6))


def test_every_plant_is_held_between_the_points_and_one_touches(found) -> None:
    worst = worst_on(DENSE, found.weight.magnitude(DENSE))
    assert 0.99 < worst <= 1.0 + 1e-6
    assert max(peak.ratio for peak in found.peaks) == pytest.approx(1.0, abs=1e-9)
    assert all(peak.exact for peak in found.peaks)
    assert found.weight.gap_db <= 0.02


def test_weight_from_the_same_points_alone_misses_peaks(found) -> None:
    on_points = np.isin(found.curve.frequency, COARSE)
    profile = interpolated(BoundOptions().profile, COARSE)
    alone = fit_magnitude_weight(COARSE, found.curve.required[on_points], 6, profile=profile)
    assert worst_on(COARSE, alone.magnitude(COARSE)) <= 1.0 + 1e-9
    assert worst_on(DENSE, alone.magnitude(DENSE)) > 1.01


@pytest.mark.parametrize("base", ["pivot", "free", "none"])
def test_largest_ratio_against_a_dense_grid(base: str) -> None:
    common = CommonPart(NominalPlant(plant(base=base), 3), *BAND, INVERSE_MULTIPLICATIVE)
    weight = fit_magnitude_weight(COARSE, np.geomspace(0.1, 3.0, COARSE.size), 4)
    for one in family(4, 3, base=base):
        comparison = PlantComparison(one, common)
        ratio = comparison.ratio(DENSE, weight)
        top = largest_ratio(comparison, weight, 60.0)
        assert ratio.max() * (1.0 - 1e-7) <= top.ratio
        assert top.ratio == pytest.approx(ratio.max(), rel=1e-2)


def test_the_output_unit_divides_out(found) -> None:
    def micro(one: ModalParameters) -> ModalParameters:
        return replace(
            one,
            residue=1e6 * one.residue,
            base_residue=1e6 * one.base_residue,
            feedthrough=1e6 * one.feedthrough,
        )

    common = CommonPart(NominalPlant(micro(plant()), 3), *BAND, INVERSE_MULTIPLICATIVE)
    other = bound_plants([micro(p) for p in PLANTS], common, COARSE, BoundOptions(order=6))
    assert other.weight.excess_db == pytest.approx(found.weight.excess_db, abs=0.02)


def lag(time_constant: float, common_pole: float = 1e-4) -> ModalParameters:
    """Return 3/(1 + T s) as a modal term; its second pole, at 1/common_pole, is cancelled."""
    both = time_constant * common_pole
    natural = 1.0 / np.sqrt(both)
    return ModalParameters(
        np.array([natural / (2.0 * np.pi)]),
        np.array([0.5 * (time_constant + common_pole) / both / natural]),
        np.array([3.0 / both]),
        np.array([3.0 / time_constant]),
        "none",
    )


@pytest.mark.outside
def test_an_uncertain_time_constant_has_exactly_its_textbook_weight() -> None:
    """U06: T = 2 (1 + 0.25 delta) is |W| = 0.25 * 2 w / |1 + 2 j w|, no wider anywhere.

    Skogestad & Postlethwaite, Multivariable Feedback Control, section 7.4.
    """
    frequency = np.geomspace(1e-3, 10.0, 120)
    common = CommonPart(NominalPlant(lag(2.0), 0), 1e-3, 10.0, INVERSE_MULTIPLICATIVE)
    omega = 2.0 * np.pi * frequency
    exact = 0.25 * 2.0 * omega / np.abs(1.0 + 2j * omega)
    extremes = [lag(2.0 * 0.75), lag(2.0 * 1.25)]
    for one in extremes:
        np.testing.assert_allclose(np.abs(common.error(frequency, one)), exact, atol=1e-9)
    options = BoundOptions(order=1, profile=[(1.0, 1.0)], radius_floor=1e-6)
    plants = [*extremes, lag(1.9), lag(2.3)]
    bound = bound_plants(plants, common, frequency, options)
    assert bound.weight.excess_db <= 0.02
    np.testing.assert_allclose(bound.weight.magnitude(frequency), exact, rtol=3e-3)
    reach = [peak.ratio for peak in bound.peaks]
    np.testing.assert_allclose(reach, [1.0, 1.0, 0.05 / 0.25, 0.15 / 0.25], rtol=3e-3)
