from dataclasses import replace

import numpy as np
import pytest

from identkit.plant_set import fields as f
from identkit.plant_set.claims import check_claims, errors_at, excess_db
from identkit.plant_set.files import load_set


@pytest.fixture(scope="module")
def bounded(bounded_set_file):
    return load_set(bounded_set_file)


def claims(contents: f.PlantSetFields) -> set[str]:
    return {failure.claim.split(" at ")[0] for failure in check_claims(contents)}


def with_certificate(contents, **changes):
    return replace(contents, certificate=replace(contents.certificate, **changes))


def scaled(matrices: f.Matrices, factor: float) -> f.Matrices:
    return replace(matrices, C=factor * matrices.C, D=factor * matrices.D)


def test_an_honest_set_stands(bounded, small_set):
    assert check_claims(bounded) == []
    assert check_claims(small_set) == []


def test_a_scaled_weight(bounded):
    weights = replace(bounded.weights, left=scaled(bounded.weights.left, 0.99))
    found = claims(replace(bounded, weights=weights))
    assert {"radii.weight_magnitude", "radii.required_radius"} <= found
    assert {"interconnection", "certificate.optimality.excess_db"} <= found
    assert sum(item.endswith("reach") for item in found) == len(bounded.plants)


def test_a_moved_mode(bounded):
    plant = bounded.plants[0]
    moved = replace(plant, modal_frequency=plant.modal_frequency * np.array([1.01, 1, 1, 1]))
    found = claims(replace(bounded, plants=(moved, *bounded.plants[1:])))
    assert found
    assert all("reach" in item or "radii" in item for item in found)


@pytest.mark.parametrize(("change", "fails"), [(5e-5, False), (3e-4, True), (-3e-4, True)])
def test_a_reach_far_below_one_may_differ_a_little(bounded, change, fails):
    far = [plant.reach < 0.9 for plant in bounded.plants]
    assert any(far)
    plants = tuple(
        replace(plant, reach=plant.reach * (1.0 + change)) if away else plant
        for plant, away in zip(bounded.plants, far, strict=True)
    )
    assert any(item.endswith("reach") for item in claims(replace(bounded, plants=plants))) == fails


def test_a_reach_at_the_bound_may_not(bounded):
    touching = [plant.reach >= 0.99 for plant in bounded.plants]
    assert any(touching)
    plants = tuple(
        replace(plant, reach=plant.reach * (1.0 - 5e-5)) if near else plant
        for plant, near in zip(bounded.plants, touching, strict=True)
    )
    assert any(item.endswith("reach") for item in claims(replace(bounded, plants=plants)))


def test_a_plant_taken_out(bounded):
    found = check_claims(replace(bounded, plants=bounded.plants[1:]))
    assert any(bounded.plants[0].response in str(failure) for failure in found)


def test_more_setting_plants_than_can_be_listed(bounded):
    """With 201 plants that set the bound one may be missing, two may not."""
    names = [f"P{k}" for k in range(201 - len(bounded.plants))]
    measured = replace(bounded.certificate.measured, setting=201)
    many = with_certificate(bounded, measured=measured)
    set_by = tuple(
        "P0" if name == bounded.plants[0].response else name for name in bounded.radii.set_by
    )
    one = replace(many, radii=replace(bounded.radii, set_by=set_by))
    assert "radii.set_by" not in claims(one)
    second = bounded.plants[1].response
    set_by = tuple(names[1] if name == second else name for name in set_by)
    two = replace(many, radii=replace(bounded.radii, set_by=set_by))
    assert "radii.set_by" in claims(two)


@pytest.mark.parametrize(
    ("field", "change"),
    [("excess_db", 0.1), ("floor_db", 0.1), ("gap_db", 0.1), ("order", 1)],
)
def test_an_edited_optimality(bounded, field, change):
    stated = bounded.certificate.optimality
    edited = replace(stated, **{field: getattr(stated, field) + change})
    found = claims(with_certificate(bounded, optimality=edited))
    assert found
    assert all(item.startswith("certificate.optimality") for item in found)


def test_counts_that_do_not_add_up(bounded):
    measured = replace(bounded.certificate.measured, of=3)
    assert "certificate.measured.held" in claims(with_certificate(bounded, measured=measured))
    measured = replace(bounded.certificate.measured, setting=1)
    assert "certificate.measured.setting" in claims(with_certificate(bounded, measured=measured))


def test_a_plant_beyond_the_set_has_to_be_excluded(bounded, make_family):
    odd = replace(make_family(1, seed=77, spread=0.2)[0], response="odd")
    reach = bounded.reach([odd])
    odd = replace(odd, reach=float(reach.value[0]), reach_frequency=float(reach.frequency[0]))
    assert odd.reach > 1.0
    wide = replace(bounded, plants=(*bounded.plants, odd))
    assert "plants, odd, reach" in claims(wide)
    measured = replace(bounded.certificate.measured, excluded=(f.Excluded("odd", "cracked"),))
    assert check_claims(with_certificate(wide, measured=measured)) == []


def test_an_unstable_or_non_minimum_phase_weight(bounded):
    left = bounded.weights.left
    for changed, word in (
        (replace(left, A=-left.A), "pole"),
        (replace(left, D=-0.2 * left.D), "zero"),
    ):
        weights = replace(bounded.weights, left=changed)
        failures = check_claims(replace(bounded, weights=weights))
        assert any(f"a {word} right of the axis" in str(failure) for failure in failures)


def test_a_ceiling_that_is_not_kept(bounded):
    radii = replace(bounded.radii, ceiling=0.99 * bounded.radii.weight_magnitude.max())
    radii = replace(radii, ceiling=np.full(radii.frequency.size, radii.ceiling))
    assert "radii.ceiling" in claims(replace(bounded, radii=radii))


def test_errors_are_reach_under_a_weight_of_one(bounded):
    grid = np.array([100.0, 1500.0, 9000.0])
    nominal = bounded.frequency_response(grid)[0, 0]
    from identkit.plant_set.response import plant_response

    expected = [np.abs(plant_response(p, grid)[0, 0] / nominal - 1) for p in bounded.plants]
    np.testing.assert_allclose(errors_at(bounded, grid), expected, rtol=1e-9)
    assert errors_at(replace(bounded, plants=()), grid).shape == (0, 3)


def test_a_set_without_radii_claims_nothing_about_them(bounded):
    empty = np.zeros(0)
    radii = f.Radii(empty, empty, empty, (), empty, 0.02)
    found = claims(replace(bounded, radii=radii))
    assert found == {"certificate.measured.setting"}
    assert np.isnan(excess_db(replace(bounded, radii=radii)))
