"""Additive sets: radius, level test between points, weight, unit invariance."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.forms.additive import ADDITIVE
from identkit.forms.between_points import largest_ratio
from identkit.forms.bounding import BoundOptions, bound_plants
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.nominal_plant import NominalPlant
from identkit.forms.radius_curve import interpolated
from identkit.methods.magnitude_weight import fit_magnitude_weight
from identkit.methods.modal_model import ModalParameters, modal_response
from tests.methods.families import family, plant

BAND = (50.0, 22e3)
PLANTS = family(8, 21)
COARSE = np.geomspace(*BAND, 300)
DENSE = np.geomspace(*BAND, 60001)
COMMON = CommonPart(NominalPlant(plant(), 3), *BAND, ADDITIVE)


def worst_on(frequency: np.ndarray, magnitude: np.ndarray) -> float:
    centre = COMMON.nominal.response(frequency)
    return max(
        float(np.max(np.abs(modal_response(frequency, one) - centre) / magnitude)) for one in PLANTS
    )


@pytest.fixture(scope="module")
def found():
    return bound_plants(PLANTS, COMMON, COARSE, BoundOptions(order=6))


def test_every_plant_is_held_between_the_points_and_one_touches(found) -> None:
    worst = worst_on(DENSE, found.weight.magnitude(DENSE))
    assert 0.99 < worst <= 1.0 + 1e-6
    assert max(peak.ratio for peak in found.peaks) == pytest.approx(1.0, abs=1e-9)
    assert all(peak.exact for peak in found.peaks)
    assert found.tolerance < 1e-6
    assert found.weight.gap_db <= 0.02
    # More than the 60 dB that targets are asked to have.
    assert found.curve.required.max() > 1e4 * found.curve.required.min()


def test_weight_from_the_same_points_alone_misses_peaks(found) -> None:
    on_points = np.isin(found.curve.frequency, COARSE)
    profile = interpolated(BoundOptions().profile, COARSE)
    alone = fit_magnitude_weight(COARSE, found.curve.required[on_points], 6, profile=profile)
    assert worst_on(COARSE, alone.magnitude(COARSE)) <= 1.0 + 1e-9
    assert worst_on(DENSE, alone.magnitude(DENSE)) > 1.01


@pytest.mark.parametrize("base", ["pivot", "none"])
def test_largest_ratio_against_a_dense_grid(base: str) -> None:
    common = CommonPart(NominalPlant(plant(base=base), 3), *BAND, ADDITIVE)
    weight = fit_magnitude_weight(COARSE, 0.3 * np.abs(common.nominal.response(COARSE)), 4)
    for one in family(4, 3, base=base):
        comparison = PlantComparison(one, common)
        ratio = comparison.ratio(DENSE, weight)
        top = largest_ratio(comparison, weight, 60.0)
        assert ratio.max() * (1.0 - 1e-7) <= top.ratio
        assert top.ratio == pytest.approx(ratio.max(), rel=1e-3)


def test_the_weight_carries_the_output_unit_and_nothing_else_changes(found) -> None:
    def micro(one: ModalParameters) -> ModalParameters:
        return replace(
            one,
            residue=1e6 * one.residue,
            base_residue=1e6 * one.base_residue,
            feedthrough=1e6 * one.feedthrough,
        )

    common = CommonPart(NominalPlant(micro(plant()), 3), *BAND, ADDITIVE)
    other = bound_plants([micro(p) for p in PLANTS], common, COARSE, BoundOptions(order=6))
    assert other.weight.excess_db == pytest.approx(found.weight.excess_db, abs=0.02)
    np.testing.assert_allclose(
        other.curve.required[::50] / 1e6,
        np.interp(other.curve.frequency[::50], found.curve.frequency, found.curve.required),
        rtol=0.05,
    )


def test_radius_floor_is_a_share_of_the_nominal() -> None:
    options = BoundOptions(order=4, radius_floor=0.05)
    alone = bound_plants([plant()], COMMON, COARSE, options)
    assert np.all(alone.curve.setter == -1)
    expected = 0.05 * np.abs(COMMON.nominal.response(alone.curve.frequency))
    np.testing.assert_allclose(alone.curve.required, expected, rtol=1e-12)


def test_a_gain_interval_has_the_constant_radius_of_its_half_width() -> None:
    """U07: k in [2, 3], centre 2.5 (Skogestad & Postlethwaite, section 7.4): |P - P0| = 0.5."""

    def gain(k: float) -> ModalParameters:
        none = np.zeros(0)
        return ModalParameters(none, none, none, none, "none", feedthrough=k)

    common = CommonPart(NominalPlant(gain(2.5), 0), *BAND, ADDITIVE)
    found = bound_plants([gain(2.0), gain(3.0)], common, COARSE, BoundOptions(order=0))
    np.testing.assert_allclose(found.curve.required, 0.5, rtol=1e-12)
    np.testing.assert_allclose(found.weight.magnitude(COARSE), 0.5, rtol=1e-9)


def test_free_base_and_matrix_plants_are_refused() -> None:
    ADDITIVE.accepts(1, 1, "pivot")
    with pytest.raises(InputError, match="infinite at rest"):
        ADDITIVE.accepts(1, 1, "free")
    with pytest.raises(InputError, match="2 outputs"):
        ADDITIVE.accepts(2, 1, "pivot")
