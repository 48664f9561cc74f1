import json
from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.grids import load
from identkit.methods.beta_binomial import BetaShares
from identkit.plant_set import fields as f
from identkit.plant_set.claims import check_claims
from identkit.plant_set.document import to_document
from identkit.plant_set.files import load_set
from identkit.plant_set.reach import Surroundings
from identkit.plant_set.response import plant_response
from identkit.stages.audit import audit
from identkit.stages.coverage import state_coverage
from identkit.stages.export import (
    SetOrigin,
    build_set,
    finished_set,
    write_certificate,
    write_set_files,
)
from identkit.stages.model_coverage import Check, ModelStatement


@pytest.fixture(scope="module")
def stages(small_results):
    return {name: load(small_results / f"{name}.nc") for name in ("nominal", "bound", "modes")}


@pytest.fixture(scope="module")
def draft(stages):
    return build_set(**stages, origin=SetOrigin(settings={"a": [1, "b"]}, time="2026-01-01"))


@pytest.fixture(scope="module")
def audited(draft, stages, small_results):
    responses, screening = (load(small_results / f"{n}.nc") for n in ("responses", "screening"))
    return audit(draft, stages["modes"], responses, screening)


def test_the_draft_is_what_was_bound(draft, stages):
    bound, nominal = stages["bound"], stages["nominal"]
    assert np.array_equal(draft.nominal.A, nominal["nominal_A"].values)
    assert np.array_equal(draft.weights.left.D, bound["weight_D"].values)
    assert draft.band == (50.0, 22000.0)
    assert draft.inputs[0].unit == "A"
    assert draft.outputs[0].unit == "um"
    assert draft.nominal.delay == 0.0
    assert draft.interconnection.states == draft.nominal.states + draft.weights.left.states
    assert draft.certificate.optimality.order == 8


def test_the_draft_stands_its_own_claims(draft):
    assert check_claims(draft) == []


def test_reach_found_again_agrees_with_the_bound(draft, audited, stages):
    """Adaptive grids here, eigenvalue level tests there: the same number to a few 1e-7."""
    bound = stages["bound"]
    used = bound["response_used"].values
    own = audited["fit_reach"].sel(response=bound["response"].values).values
    np.testing.assert_allclose(own[used], bound["reach"].values[used], rtol=5e-7)
    # Several peaks touch an optimal weight, so the places may differ where the values do not.
    around = Surroundings(draft)
    plants = {plant.response: plant for plant in draft.plants}
    for name in bound["response"].values[used]:
        hertz = bound["reach_frequency"].sel(response=name).values[None]
        there = np.moveaxis(plant_response(plants[str(name)], hertz), -1, 0)
        expected = float(bound["reach"].sel(response=name))
        assert around.reach_at(hertz, there)[0] == pytest.approx(expected, rel=5e-7)
    assert bound["reach"].values[used].max() == pytest.approx(1.0, abs=1e-6)


def test_counts_exclusions_and_envelope(draft, stages):
    measured = draft.certificate.measured
    assert (measured.held, measured.of) == (12, 12)
    assert len(measured.excluded) == 4
    assert all("U04" in item.label for item in measured.excluded)
    assert all("cracked arm" in item.reason for item in measured.excluded)
    assert len(draft.plants) == 16
    envelope = draft.certificate.envelope
    assert envelope.temperature == (25.0, 50.0)
    assert envelope.position is None
    assert envelope.labels["unit"] == ("U01", "U02", "U03")
    assert set(envelope.labels) == {"unit", "head", "lot"}


def test_excluded_plants_carry_the_reach_of_the_file(draft, audited):
    out = {item.label for item in draft.certificate.measured.excluded}
    for plant in draft.plants:
        own = float(audited["fit_reach"].sel(response=plant.response))
        assert plant.reach == pytest.approx(own, rel=1e-6)
        assert plant.reach <= 1.0 + 1e-6 or plant.response in out


def test_attribution_names_plants_and_starts_at_the_weight(draft):
    reaches = [line.reach for line in draft.attribution]
    assert reaches == sorted(reaches, reverse=True)
    assert reaches[0] == pytest.approx(1.0, abs=1e-3)
    assert {line.label for line in draft.attribution} <= {plant.response for plant in draft.plants}


def test_provenance(draft):
    assert draft.provenance.settings == {"a": [1, "b"]}
    assert set(draft.provenance.versions) >= {"identkit", "numpy", "python"}
    assert SetOrigin().time.endswith("+00:00")


def test_covariances_come_along_in_the_order_of_the_fit(draft, stages):
    plant = draft.plants[0]
    names = plant.covariance.parameters
    at = names.index("modal_frequency_1")
    own = stages["modes"]["modal_frequency_standard_error"].sel(response=plant.response).values
    column = np.nanargmin(
        np.abs(
            stages["modes"]["modal_frequency"].sel(response=plant.response).values
            - plant.modal_frequency[0]
        )
    )
    assert np.sqrt(plant.covariance.matrix[at, at]) == pytest.approx(own[column], rel=1e-9)


@pytest.mark.parametrize("passed", [True, False])
def test_the_set_carries_the_model_only_where_its_checks_pass(draft, audited, passed):
    check = Check("unit effects are normal", passed, "chance 0.5")
    model = ModelStatement(BetaShares(90.0, 10.0), 16, 2400, 12, (check,))
    stated = finished_set(draft, audited, state_coverage(model=model)).certificate.coverage
    if not passed:
        assert stated is None
        return
    assert stated.units == 16
    assert "virtual units" in stated.method
    assert any("normal" in line for line in stated.assumptions)


def test_a_passed_audit_writes_both_files(draft, audited, tmp_path):
    coverage = state_coverage({f"unit {k}": 0.9 for k in range(30)}, content=0.9)
    final = finished_set(draft, audited, coverage)
    assert final.certificate.audit == f.AuditVerdict(True)
    assert final.certificate.coverage.units == 30
    written = write_set_files(final, tmp_path)
    assert [path.name for path in written] == ["set.json", "set.h5"]
    small, whole = (load_set(path) for path in written)
    a, b = to_document(small), to_document(whole)
    assert len(a.pop("plants")) < len(b.pop("plants")) == 16
    assert a == b
    assert b["certificate"]["audit"] == {"passed": True, "failed": [], "forced": False}


def test_nothing_is_claimed_about_coverage_without_held_out_units(draft, audited):
    assert finished_set(draft, audited, state_coverage()).certificate.coverage is None
    assert finished_set(draft, audited).certificate.coverage is None


def failing(draft, stages):
    """A weight 1 % too small: held plants fall out."""
    left = draft.weights.left
    weights = replace(draft.weights, left=replace(left, C=0.99 * left.C, D=0.99 * left.D))
    broken = replace(draft, weights=weights)
    return broken, audit(broken, stages["modes"])


def test_a_failed_audit_writes_nothing_and_takes_old_files_away(draft, stages, audited, tmp_path):
    write_set_files(finished_set(draft, audited), tmp_path)
    broken, table = failing(draft, stages)
    final = finished_set(broken, table)
    assert not final.certificate.audit.passed
    assert write_set_files(final, tmp_path) == ()
    assert list(tmp_path.iterdir()) == []


def test_a_forced_file_says_so_inside(draft, stages, tmp_path):
    broken, table = failing(draft, stages)
    (path,) = write_set_files(finished_set(broken, table, forced=True), tmp_path, ["json"])
    verdict = load_set(path).certificate.audit
    assert verdict.forced
    assert not verdict.passed
    assert any("is not held: its fit reaches 1.01" in sentence for sentence in verdict.failed)


def test_a_set_that_was_not_audited_is_not_written(draft, tmp_path):
    with pytest.raises(InputError, match="a set that was audited"):
        write_set_files(draft, tmp_path)


def test_the_certificate(draft, audited, tmp_path):
    final = finished_set(draft, audited)
    written = write_set_files(final, tmp_path, ["hdf5"])
    write_certificate(final, tmp_path / "certificate.json", ["All held."], written)
    document = json.loads((tmp_path / "certificate.json").read_text())
    assert document["held"] is True
    assert document["verdict"] == ["All held."]
    assert document["set_files"] == ["set.h5"]
    assert document["certificate"] == to_document(final)["certificate"]


def test_a_cap_becomes_the_ceiling(stages):
    capped = build_set(**stages, origin=SetOrigin(cap=[(100.0, 50.0), (10_000.0, 100.0)]))
    radii = capped.radii
    assert radii.ceiling[0] == 50.0
    assert radii.ceiling[-1] == 100.0
    middle = np.interp(np.log(1000.0), np.log(radii.frequency), radii.ceiling)
    assert middle == pytest.approx(75.0, rel=1e-3)


def test_other_forms_are_refused(stages):
    bound = stages["bound"].assign_attrs(form="parametric")
    with pytest.raises(InputError, match="'parametric'"):
        build_set(stages["nominal"], bound, stages["modes"])


def test_a_plant_of_another_number_of_unstable_poles_is_named_not_listed(stages):
    modes, bound = stages["modes"].copy(deep=True), stages["bound"].copy(deep=True)
    modes["damping_ratio"][0, 0] *= -1.0
    bound["response_used"][0] = False
    bound["reach"][0] = np.nan
    bound["exclusion_reason"] = bound["exclusion_reason"].astype(object)
    bound["exclusion_reason"][0] = "2 unstable poles, the nominal has 0"
    name = str(modes["response"].values[0])
    whole = build_set(stages["nominal"], bound, modes)
    assert name not in {plant.response for plant in whole.plants}
    excluded = {item.label: item.reason for item in whole.certificate.measured.excluded}
    assert excluded[name] == "2 unstable poles, the nominal has 0"
