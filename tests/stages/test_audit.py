import json
from dataclasses import replace

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.grids import gather
from identkit.methods.modal_model import parameter_names
from identkit.outcomes import Outcome
from identkit.plant_set import fields as f
from identkit.plant_set.files import load_set
from identkit.plant_set.response import plant_response
from identkit.stages.audit import (
    all_held,
    audit,
    audit_responses,
    audit_table,
    failed_sentences,
    nearest_modes,
    run_verdict,
)
from identkit.stages.set_plants import set_plants

GRID = np.geomspace(60.0, 19_000.0, 300)
SIGMA = 0.01


@pytest.fixture(scope="module")
def bounded(bounded_set_file):
    return load_set(bounded_set_file)


def responses_of(plants, *, grid=GRID, noise=SIGMA, variance=True, seed=0):
    """Measured responses of plants, with relative noise."""
    generator = np.random.default_rng(seed)
    clean = np.array([plant_response(plant, grid)[0, 0] for plant in plants])
    draw = generator.standard_normal(clean.shape) + 1j * generator.standard_normal(clean.shape)
    measured = clean * (1.0 + noise / np.sqrt(2.0) * draw)
    dims = ("response", "output", "input", "frequency")
    variables = {"frequency_response": (dims, measured[:, None, None])}
    if variance:
        stated = (noise * np.abs(clean)) ** 2
        variables["frequency_response_variance"] = (dims, stated[:, None, None])
    return xr.Dataset(variables, coords=coordinates(plants) | {"frequency": grid})


def coordinates(plants):
    return {
        "response": [plant.response for plant in plants],
        "unit": ("response", [plant.labels.get("unit", "") for plant in plants]),
        "temperature": (
            "response",
            np.array([plant.labels.get("temperature", np.nan) for plant in plants], dtype=float),
        ),
        "output": ["y"],
        "input": ["u"],
    }


def modes_of(plants, *, columns=5):
    """Paired modes of plants with four modes: fit order reversed, one column of extra modes."""
    count = len(plants)
    per_mode = np.full((count, columns), np.nan)
    frequency, damping, residue = per_mode.copy(), per_mode.copy(), per_mode.copy()
    for row, plant in enumerate(plants):
        frequency[row, :4] = plant.modal_frequency
        damping[row, :4] = plant.damping_ratio
        residue[row, :4] = plant.residue[:, 0, 0]
    position = np.full((count, columns), -1)
    position[:, :4] = [3, 2, 1, 0]
    size = len(parameter_names("pivot", 4, general=False))
    covariance = np.broadcast_to(np.diag(np.arange(1.0, size + 1)), (count, size, size)).copy()
    single = {
        "base_residue": [plant.base_residue for plant in plants],
        "feedthrough": [plant.feedthrough for plant in plants],
    }
    channel = ("response", "output", "input")
    return xr.Dataset(
        {
            "modal_frequency": (("response", "mode"), frequency),
            "damping_ratio": (("response", "mode"), damping),
            "residue": (("response", "mode", "output", "input"), residue[:, :, None, None]),
            "mode_position": (("response", "mode"), position),
            "base_frequency": ("response", [plant.base_frequency for plant in plants]),
            "base_damping_ratio": ("response", [plant.base_damping_ratio for plant in plants]),
            **{name: (channel, np.array(values)) for name, values in single.items()},
            "delay": ("response", [plant.delay for plant in plants]),
            "fit_outcome": ("response", np.zeros(count, dtype=np.int8)),
            "parameter_covariance": (("response", "parameter", "parameter_other"), covariance),
        },
        coords={**coordinates(plants), "mode": ["M1", "M2", "M3", "M4", "E1"][:columns]},
        attrs={"base": "pivot", "residues": "real"},
    )


def all_plants(makers):
    return makers.family(24)


def test_plants_come_back_from_a_modes_dataset(makers):
    plants = all_plants(makers)[:3]
    found, missing = set_plants(modes_of(plants))
    assert missing == {}
    for plant, back in zip(plants, found, strict=True):
        order = np.argsort(-plant.modal_frequency)
        assert np.array_equal(back.modal_frequency, plant.modal_frequency[order])
        np.testing.assert_array_equal(back.residue, plant.residue[order])
        np.testing.assert_allclose(plant_response(back, GRID), plant_response(plant, GRID))
        assert back.covariance.parameters == parameter_names("pivot", 4, general=False)
        assert {k: v for k, v in back.labels.items() if k != "head"} == {
            k: v for k, v in plant.labels.items() if k != "head"
        }


def test_a_failed_fit_is_named_and_a_singular_covariance_left_out(makers):
    modes = modes_of(all_plants(makers)[:3])
    modes["feedthrough"][1] = np.nan
    modes["fit_outcome"][1] = Outcome.TOO_FEW_POINTS
    modes["parameter_covariance"][2] = np.nan
    found, missing = set_plants(modes)
    assert [plant.response for plant in found] == ["U0/H0", "U1/H0"]
    assert missing == {"U0/H1": "not fitted: fewer usable points than the model has parameters"}
    assert found[1].covariance is None


def test_an_honest_set_holds_its_plants(bounded, makers):
    plants = all_plants(makers)
    table = audit(bounded, modes_of(plants), responses_of(plants))
    assert set(table["verdict"].values) == {"held"}
    assert set(table["fit_verdict"].values) == {"held"}
    assert float(table["fit_reach"].max()) == pytest.approx(1.0, abs=1e-5)
    assert json.loads(table.attrs["failed_checks"]) == []
    assert run_verdict(table) == f.AuditVerdict(True)
    assert all_held(table)
    stored = {plant.response: plant.reach for plant in bounded.plants}
    for name, reach in stored.items():
        assert float(table["fit_reach"].sel(response=name)) == pytest.approx(reach, rel=1e-6)


def test_raw_points_of_a_plant_that_sets_the_bound_cannot_tell(bounded, makers):
    """Noise pushes points beyond a weight that the plant itself touches."""
    plants = all_plants(makers)
    table = audit_responses(bounded, responses_of(plants, noise=0.05))
    assert "cannot tell" in table["verdict"].values
    assert "not held" not in table["verdict"].values
    assert not all_held(table)
    assert failed_sentences(table) == []


def test_a_response_outside_is_named_with_its_frequency(bounded, makers):
    plants = all_plants(makers)
    far = replace(plants[2], modal_frequency=plants[2].modal_frequency * [1.0, 1.0, 1.1, 1.0])
    changed = [*plants[:2], far, *plants[3:]]
    table = audit(bounded, modes_of(changed), responses_of(changed))
    verdicts = dict(zip(table["response"].values, table["verdict"].values, strict=True))
    assert verdicts.pop("U1/H0") == "not held"
    assert set(verdicts.values()) == {"held"}
    sentences = failed_sentences(table)
    assert len(sentences) == 1
    assert sentences[0].startswith("U1/H0 is not held: its fit reaches ")
    row = table.sel(response="U1/H0")
    assert str(row["nearest_mode"].values) == "M3"
    assert str(row["raw_verdict"].values) == "not held"
    assert not run_verdict(table).passed
    assert run_verdict(table, forced=True).forced
    by_points = audit_responses(bounded, responses_of(changed))
    assert failed_sentences(by_points)[0].startswith(
        "U1/H0 is not held: its measured points, noise allowed for, reaches"
    )


def test_an_excluded_response_is_judged_but_does_not_count(bounded, makers):
    plants = all_plants(makers)
    far = replace(
        plants[2], response="odd", modal_frequency=plants[2].modal_frequency * [1, 1, 1.1, 1]
    )
    measured = replace(bounded.certificate.measured, excluded=(f.Excluded("odd", "cracked arm"),))
    contents = replace(bounded, certificate=replace(bounded.certificate, measured=measured))
    table = audit(contents, modes_of([*plants, far]))
    row = table.sel(response="odd")
    assert bool(row["excluded"])
    assert str(row["reason"].values) == "cracked arm"
    assert str(row["verdict"].values) == "not held"
    assert run_verdict(table).passed
    assert all_held(table)


def test_a_tampered_set_fails_its_own_claims(bounded, makers):
    stated = replace(bounded.certificate.optimality, gap_db=1.0)
    broken = replace(bounded, certificate=replace(bounded.certificate, optimality=stated))
    table = audit(broken, modes_of(all_plants(makers)))
    verdict = run_verdict(table)
    assert not verdict.passed
    assert verdict.failed[0].startswith("certificate.optimality.gap_db: found 1.0000")
    assert not all_held(table)


def test_without_a_fit_the_points_decide(bounded, makers):
    plants = all_plants(makers)[:4]
    modes = modes_of(plants)
    modes["feedthrough"][1] = np.nan
    modes["fit_outcome"][1] = Outcome.NOT_CONVERGED
    table = audit(bounded, modes, responses_of(plants, noise=1e-4))
    row = table.sel(response="U0/H1")
    assert str(row["fit_verdict"].values) == "no fit"
    assert np.isnan(float(row["fit_reach"]))
    assert str(row["verdict"].values) == "held"
    assert "did not settle" in str(row["reason"].values)
    alone = audit(bounded, modes)
    assert str(alone["verdict"].sel(response="U0/H1").values) == "not judged"
    assert not all_held(alone)


def test_residuals_stand_in_for_a_missing_variance(bounded, makers):
    plants = all_plants(makers)
    data = responses_of(plants, noise=0.05, variance=False)
    with_fit = audit(bounded, modes_of(plants), data)
    truth = audit(bounded, modes_of(plants), responses_of(plants, noise=0.05))
    close = with_fit["raw_reach_with_allowance"] - truth["raw_reach_with_allowance"]
    assert float(np.abs(close).median()) < 0.05
    assert "not held" not in with_fit["raw_verdict"].values
    without = audit(bounded, None, data)
    assert set(without["raw_verdict"].values) <= {"held", "cannot tell"}


def test_a_gross_error_is_told_without_variance_and_without_fit(bounded, makers):
    plants = all_plants(makers)[:4]
    data = responses_of(plants, noise=0.002, variance=False)
    good = audit(bounded, None, data)
    assert set(good["verdict"].values) <= {"held", "cannot tell"}
    assert (good["raw_reach_with_allowance"] > 0.1).any()
    data["frequency_response"] *= 10.0
    assert (audit(bounded, None, data)["verdict"] == "not held").all()


def test_a_response_whose_variance_is_missing_is_judged_by_its_neighbours(bounded, makers):
    data = responses_of(all_plants(makers)[:2])
    data["frequency_response_variance"][1] = np.nan
    data["frequency_response"][1] *= 10.0
    table = audit(bounded, None, data)
    assert str(table["raw_verdict"].values[1]) == "not held"


def test_screening_and_several_grids(bounded, makers):
    plants = all_plants(makers)[:6]
    first = responses_of(plants[:4])
    second = responses_of(plants[4:], grid=np.linspace(20.0, 19_000.0, 211))
    first["frequency_response"][1, 0, 0, 40] *= 30.0
    masks = []
    for part in (first, second):
        mask = np.ones(part["frequency_response"].shape, dtype=bool)
        masks.append(xr.Dataset({"usable_mask": (part["frequency_response"].dims, mask)}))
    masks[0]["usable_mask"][1, 0, 0, 40] = False
    data = gather([first, second])
    spoiled = audit(bounded, None, data)
    assert str(spoiled["raw_verdict"].sel(response="U0/H1").values) == "not held"
    table = audit(bounded, None, data, gather(masks))
    assert str(table["raw_verdict"].sel(response="U0/H1").values) != "not held"
    assert table["points_left_out"].values.tolist() == [0, 1, 0, 0, 0, 0]
    assert table["points_used"].values.tolist() == [300, 299, 300, 300, 210, 210]
    assert table["points_outside_band"].values.tolist() == [0, 0, 0, 0, 1, 1]


def test_the_table_for_people(bounded, makers):
    plants = all_plants(makers)[:4]
    frame = audit_table(audit(bounded, modes_of(plants), responses_of(plants)))
    assert list(frame.columns) == [
        "response",
        "unit",
        "temperature",
        "verdict",
        "fit_verdict",
        "fit_reach",
        "fit_reach_frequency_hz",
        "nearest_mode",
        "raw_verdict",
        "raw_reach",
        "raw_reach_frequency_hz",
        "raw_reach_with_allowance",
        "raw_reach_with_allowance_frequency_hz",
        "points_used",
        "points_left_out",
        "points_outside_band",
        "excluded",
        "reason",
    ]
    assert frame["unit"].tolist() == ["U0", "U0", "U1", "U1"]
    assert frame["temperature"].isna().tolist() == [True, False, False, True]


def test_nothing_or_other_channels_are_refused(bounded, makers):
    with pytest.raises(InputError, match="neither fits nor responses"):
        audit(bounded)
    wide = responses_of(all_plants(makers)[:2])
    wide = xr.concat([wide, wide], "input", join="override", data_vars="all")
    wide = wide.transpose("response", "output", "input", "frequency")
    with pytest.raises(InputError, match="1 outputs and 2 inputs"):
        audit(bounded, None, wide)


def test_a_far_frequency_has_no_nearest_mode(makers):
    plants = all_plants(makers)[:2]
    modes = modes_of(plants)

    def near(data, *hertz):
        return nearest_modes(data, plants, np.array(hertz))

    assert near(modes, 1510.0, 2300.0) == {"U0/H0": "M1"}
    assert near(modes.drop_vars("mode"), 2300.0, 1510.0) == {"U0/H1": "mode 1"}
    modes["modal_frequency"][0] = np.nan
    assert near(modes, 1510.0, 2300.0) == {}
