"""Stage fit: labelled in and out, outcomes per response, the same for any number of workers."""

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.grids import gather, load, save
from identkit.outcomes import Outcome
from identkit.plants import plant_parameters
from identkit.stages.fit import fit_modes, refit_modes
from identkit.synthetic import Story, invent_campaign, to_dataset

SOUND = Story(odd_lot="none", cracked_unit="none")


@pytest.fixture(scope="module")
def campaign():
    return invent_campaign(seed=4, units=2, heads=2, temperatures=(10.0, 25.0, 50.0), story=SOUND)


@pytest.fixture(scope="module")
def responses(campaign):
    return to_dataset(campaign)


@pytest.fixture(scope="module")
def fits(responses):
    return fit_modes(responses)


def test_every_mode_of_every_response_within_its_interval(campaign, fits):
    assert (fits["fit_outcome"] == Outcome.DONE).all()
    assert fits.sizes["mode"] == 8
    for k, response in enumerate(campaign.responses):
        covariance = fits["parameter_covariance"].values[k]
        error = np.sqrt(np.diag(covariance)[5::3])
        off = fits["modal_frequency"].values[k] - response.plant.modal_frequency
        assert np.all(np.abs(off) < 5 * error)


def test_layout_follows_the_contract(responses, fits):
    assert fits["residue"].dims == ("response", "mode", "output", "input")
    assert fits["parameter_covariance"].dims == ("response", "parameter", "parameter_other")
    assert fits["fit_outcome"].dtype == np.int8
    assert fits["mode_outcome"].dtype == np.int8
    assert list(fits["parameter"].values[:3]) == ["delay", "feedthrough", "base_frequency"]
    assert fits.attrs["base"] == "pivot"
    assert fits.attrs["input_unit"] == responses.attrs["input_unit"]
    for label in ("unit", "head", "temperature", "source"):
        np.testing.assert_array_equal(fits[label].values, responses[label].values)
    assert (fits["usable_points"] == 1200).all()
    assert np.all(np.diff(fits["modal_frequency"].values, axis=1) > 0)
    np.testing.assert_allclose(fits["noise_ratio"], 1.0, atol=0.15)


def test_any_number_of_workers_gives_the_same_bits(responses, fits):
    xr.testing.assert_identical(fit_modes(responses, jobs=2), fits)


def test_survives_a_file(fits, tmp_path):
    save(fits, tmp_path / "fits.nc")
    xr.testing.assert_equal(load(tmp_path / "fits.nc"), fits)


def test_bad_responses_are_coded_and_do_not_stop_the_others(responses):
    spoiled = responses.isel(response=slice(0, 4)).copy(deep=True)
    values = spoiled["frequency_response"].values
    values[0] = np.nan
    values[1, ..., 5:] = np.nan
    rng = np.random.default_rng(0)
    sigma = np.sqrt(spoiled["frequency_response_variance"].values[2] / 2)
    values[2] = sigma * (rng.standard_normal(sigma.shape) + 1j * rng.standard_normal(sigma.shape))
    fits = fit_modes(spoiled)
    assert fits["fit_outcome"].values[0] == Outcome.NOT_FINITE
    assert fits["fit_outcome"].values[1] == Outcome.TOO_FEW_POINTS
    assert fits["fit_outcome"].values[2] in (Outcome.NO_MODES, Outcome.SINGULAR_COVARIANCE)
    assert fits["fit_outcome"].values[3] == Outcome.DONE
    assert np.isnan(fits["modal_frequency"].values[:3]).all()
    assert np.isnan(fits["parameter_covariance"].values[0]).all()
    assert (fits["mode_outcome"].values[:3] == Outcome.NOT_FITTED).all()


def test_screening_marks_points(responses):
    part = responses.isel(response=slice(0, 2))
    mask = part["usable_mask"].copy(deep=True)
    mask[..., ::4] = False
    fits = fit_modes(part, xr.Dataset({"usable_mask": mask}))
    assert (fits["usable_points"] == 900).all()
    assert (fits["fit_outcome"] == Outcome.DONE).all()


def test_several_grids_come_back_in_order(responses, fits):
    first = responses.isel(response=slice(0, 3))
    second = responses.isel(response=slice(3, 5), frequency=slice(0, None, 2))
    both = fit_modes(gather([first, second]))
    np.testing.assert_array_equal(both["response"], responses["response"].values[:5])
    np.testing.assert_array_equal(both["usable_points"], [1200, 1200, 1200, 600, 600])
    np.testing.assert_array_equal(both["modal_frequency"][:3], fits["modal_frequency"][:3])


def test_without_variance_the_ratio_is_missing(responses):
    plain = responses.isel(response=slice(0, 2)).drop_vars("frequency_response_variance")
    fits = fit_modes(plain)
    assert np.isnan(fits["noise_ratio"]).all()
    assert fits.attrs["variance_source"] == "residuals"
    assert (fits["fit_outcome"] == Outcome.DONE).all()


def test_mode_below_significance_is_marked(responses):
    loud = responses.isel(response=slice(0, 1)).copy(deep=True)
    fits = fit_modes(loud, modes=9)
    outcome = fits["mode_outcome"].values[0]
    assert (outcome == Outcome.MODE_BELOW_SIGNIFICANCE).sum() + (
        outcome == Outcome.MODE_OUT_OF_BAND
    ).sum() == 1


def test_automatic_residues_keep_one_layout(responses):
    fits = fit_modes(responses.isel(response=slice(0, 2)), residues="auto")
    names = list(fits["parameter"].values)
    place = names.index("residue_rate_1")
    assert not fits["parameter_covariance"].values[:, place].any()
    assert names.index("modal_frequency_2") - names.index("modal_frequency_1") == 4


def test_refit_from_a_start_finds_the_same_place(responses, fits):
    names = [str(name) for name in responses["response"].values]
    starts = {name: plant_parameters(fits, k) for k, name in enumerate(names[:3])}
    again = refit_modes(responses.isel(response=slice(0, 4)), starts)
    error = np.sqrt(np.einsum("rpp->rp", fits["parameter_covariance"].values)[:3, 5::3])
    off = again["modal_frequency"].values[:3] - fits["modal_frequency"].values[:3]
    assert np.all(np.abs(off) < 0.2 * error)
    np.testing.assert_array_equal(again["start_mode"].values[:3], np.tile(np.arange(8), (3, 1)))
    assert again["fit_outcome"].values[3] == Outcome.NOT_FITTED


def test_progress_counts_responses(responses):
    seen = []
    fit_modes(responses.isel(response=slice(0, 10)), progress=lambda *count: seen.append(count))
    assert seen[-1] == (10, 10)


def test_matrix_plants_and_odd_screenings_are_refused(responses):
    wide = xr.concat(
        [responses, responses.assign_coords(input=["other"])], "input", data_vars="minimal"
    )
    with pytest.raises(InputError, match="input"):
        fit_modes(wide)
    part = responses[["usable_mask"]]
    with pytest.raises(InputError, match="grids"):
        fit_modes(responses, gather([part, part]))
    part = part.isel(response=slice(0, 2))
    with pytest.raises(InputError, match="marks"):
        fit_modes(responses, part)
    with pytest.raises(InputError, match="base"):
        refit_modes(responses, {})
