"""Pairing of labelled fits: names, outcomes, extras, and the warm refit for missing modes."""

from dataclasses import replace

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.outcomes import Outcome
from identkit.stages import warm_refit
from identkit.stages.fit import fit_modes
from identkit.stages.pair import pair_modes
from identkit.synthetic import InventedBench, Story, invent_campaign, to_dataset
from tests.stages.invented_fits import FitErrors, invented_fits

SOUND = Story(odd_lot="none", cracked_unit="none")


@pytest.fixture(scope="module")
def campaign():
    return invent_campaign(seed=1)


@pytest.fixture(scope="module")
def fits(campaign):
    return invented_fits(campaign, FitErrors(missing=0.03, extra=0.3))


@pytest.fixture(scope="module")
def paired(fits):
    return pair_modes(fits)


def test_every_mode_has_its_true_name(campaign, paired):
    frequency = paired["modal_frequency"].values[:, :8]
    truth = np.array([r.plant.modal_frequency[:8] for r in campaign.responses])
    found = np.isfinite(frequency)
    assert np.abs(frequency / truth - 1.0)[found].max() < 2e-3  # fit errors are 0.03 % at most
    assert paired["mode"].values[:8].tolist() == [f"M{k}" for k in range(1, 9)]
    assert paired["mode_in_population"].values.sum() == 8


def test_missing_and_extra_modes_are_reported_not_forced(fits, paired):
    outcome = paired["mode_outcome"].values
    frequency = paired["modal_frequency"].values
    inside = paired["mode_in_population"].values
    assert np.array_equal(
        outcome[:, inside] == Outcome.MODE_MISSING, np.isnan(frequency[:, inside])
    )
    extra = outcome == Outcome.MODE_EXTRA
    assert not extra[:, inside].any()
    assert np.array_equal(extra[:, ~inside], np.isfinite(frequency[:, ~inside]))
    # nothing is lost: every fitted mode stands somewhere
    assert np.isfinite(frequency).sum() == np.isfinite(fits["modal_frequency"].values).sum()
    assert 40 < (outcome[:, inside] == Outcome.MODE_MISSING).sum() < 110  # 69 expected


def test_the_cracked_unit_keeps_its_names_as_shifted_modes(paired):
    of_unit = paired.sel(response=paired["unit"] == "U13")
    for mode in ("M2", "M4"):
        outcome = of_unit["mode_outcome"].sel(mode=mode).values
        assert set(outcome) <= {Outcome.MODE_SHIFTED, Outcome.MODE_MISSING}
        assert (outcome == Outcome.MODE_SHIFTED).sum() >= 9
    others = paired.sel(response=paired["unit"] != "U13")
    assert not (others["mode_outcome"] == Outcome.MODE_SHIFTED).any()
    # its additional resonance shares one column
    extra = of_unit["modal_frequency"].values[:, ~paired["mode_in_population"].values]
    assert (np.abs(extra / 7150.0 - 1.0) < 0.01).sum(axis=0).max() >= 11


def test_positions_and_standard_errors_point_into_the_fit(fits, paired):
    position = paired["mode_position"].values
    rows, columns = np.nonzero(position >= 0)
    places = position[rows, columns]
    for name in ("modal_frequency", "damping_ratio"):
        assert np.array_equal(paired[name].values[rows, columns], fits[name].values[rows, places])
    covariance = fits["parameter_covariance"].values
    names = fits["parameter"].values.tolist()
    for row, column, place in list(zip(rows, columns, places, strict=True))[::97]:
        at = names.index(f"residue_{place + 1}")
        expected = np.sqrt(covariance[row, at, at])
        assert paired["residue_standard_error"].values[row, column, 0, 0] == expected


def test_inputs_are_left_as_they_were(fits):
    before = fits.copy(deep=True)
    pair_modes(fits)
    assert fits.identical(before)


def test_fits_without_head_lot_or_temperature_are_paired_too(campaign):
    fits = invented_fits(invent_campaign(seed=2, heads=1, story=SOUND), FitErrors())
    bare = fits.drop_vars(["head", "lot", "temperature", "unit", "measured_at"])
    paired = pair_modes(bare)
    assert paired.sizes["mode"] == 8
    assert (paired["mode_outcome"] == Outcome.DONE).all()


def test_modes_below_significance_say_so():
    fits = invented_fits(invent_campaign(seed=3, units=6, story=SOUND), FitErrors())
    fits["mode_outcome"][4, 2] = Outcome.MODE_BELOW_SIGNIFICANCE
    paired = pair_modes(fits)
    assert paired["mode_outcome"].values[4, 2] == Outcome.MODE_BELOW_SIGNIFICANCE


def test_crossings_are_reported():
    fits = invented_fits(invent_campaign(seed=4, units=8, story=SOUND), FitErrors())
    swapped = fits.copy(deep=True)
    # one response in which the fifth mode stands above the sixth: 8260 and 10650 are too far
    # apart to cross, so bring the whole population's sixth down to 2 % above the fifth
    swapped["modal_frequency"][:, 5] = swapped["modal_frequency"][:, 4] * 1.02
    fifth = float(swapped["modal_frequency"][0, 4])
    for name in ("damping_ratio", "residue"):
        one, two = (swapped[name].values[0, k].copy() for k in (4, 5))
        swapped[name].values[0, 4], swapped[name].values[0, 5] = two, one
    paired = pair_modes(swapped)
    assert paired["mode_outcome"].values[0, 4:6].tolist() == [Outcome.MODE_CROSSING] * 2
    assert paired["mode_crossing_mask"].values.sum() == 2
    assert paired["modal_frequency"].values[0, 5] == fifth


def test_nothing_to_pair_is_refused_in_one_sentence(fits):
    with pytest.raises(InputError, match="no response"):
        pair_modes(fits.isel(response=slice(0, 0)))


@pytest.mark.parametrize("axis", [0, 3])
def test_no_mode_at_all_is_a_population_of_none(fits, axis):
    empty = fits.isel(mode=slice(0, axis)).copy(deep=True)
    empty["modal_frequency"][:] = np.nan
    paired = pair_modes(empty)
    assert paired.sizes["mode"] == 0
    assert paired["delay"].equals(fits["delay"])


def test_modes_of_single_responses_are_all_extra(fits):
    """Three responses, a different mode in each: no population, nothing lost."""
    few = fits.isel(response=[0, 1, 2]).copy(deep=True)
    keep = np.zeros(few["modal_frequency"].shape, dtype=bool)
    keep[[0, 1, 2], [0, 3, 6]] = True
    few["modal_frequency"] = few["modal_frequency"].where(
        xr.DataArray(keep, dims=few["modal_frequency"].dims)
    )
    paired = pair_modes(few)
    assert not paired["mode_in_population"].any()
    assert paired["mode"].values.tolist() == ["E1", "E2", "E3"]
    assert (paired["mode_outcome"].values[[0, 1, 2], [0, 1, 2]] == Outcome.MODE_EXTRA).all()


def test_two_outputs_are_paired_on_both_residues():
    fits = invented_fits(invent_campaign(seed=7, units=8, story=SOUND), FitErrors(extra=0.2))
    rng = np.random.default_rng(7)
    second = fits["residue"] * rng.normal(-0.5, 0.02, fits["residue"].shape)
    residue = xr.concat([fits["residue"], second], "output").assign_coords(
        output=["position", "velocity"]
    )
    names = fits["parameter"].values
    two = fits.drop_vars(["residue", "residue_rate", "base_residue", "feedthrough", "output"])
    two = two.assign(residue=residue)
    paired = pair_modes(two)
    one = pair_modes(fits)
    assert paired["residue"].dims == ("response", "mode", "output", "input")
    assert paired["mode_in_population"].values.sum() == 8
    assert np.array_equal(
        paired["modal_frequency"].values[:, :8],
        one["modal_frequency"].values[:, :8],
        equal_nan=True,
    )
    assert "residue_1" in names  # one name for all channels: its error stands for each


def test_a_mode_lost_by_the_first_fit_is_found_again():
    campaign = invent_campaign(
        seed=5, units=6, heads=2, story=SOUND, bench=InventedBench(points=500)
    )
    responses = to_dataset(campaign)
    fits = fit_modes(responses)
    lost = fits.copy(deep=True)
    for row, place in ((0, 3), (5, 0), (11, 6)):
        _forget(lost, row, place)
    assert (pair_modes(lost)["mode_outcome"] == Outcome.MODE_MISSING).sum() == 3
    found = pair_modes(lost, responses)
    assert (found["mode_outcome"] == Outcome.DONE).all()
    assert found["mode_found_warm_mask"].values.sum() == 3
    whole = pair_modes(fits, responses)
    frequency = found["modal_frequency"].values[:, :8]
    assert frequency == pytest.approx(whole["modal_frequency"].values[:, :8], rel=1e-4)
    assert np.isfinite(found["modal_frequency_standard_error"].values[:, :8]).all()


def test_a_mode_that_is_not_there_stays_missing():
    campaign = invent_campaign(
        seed=6, units=6, heads=2, story=SOUND, bench=InventedBench(points=500)
    )
    responses = to_dataset(campaign)
    fits = fit_modes(responses)
    # the same plant without its second mode, measured without noise
    responses["frequency_response"][3, 0, 0] -= _term(campaign, campaign.responses[3].plant, 1)
    refitted = fit_modes(responses.isel(response=[3]))
    for name in ("modal_frequency", "damping_ratio", "mode_significance"):
        fits[name][3] = np.nan
        fits[name][3, : refitted.sizes["mode"]] = refitted[name].values[0]
    for name in ("residue", "residue_rate"):
        fits[name][3] = np.nan
        fits[name][3, : refitted.sizes["mode"]] = refitted[name].values[0]
    paired = pair_modes(fits, responses)
    assert paired["mode_outcome"].sel(mode="M2").values[3] == Outcome.MODE_MISSING
    assert (paired["mode_outcome"] == Outcome.MODE_MISSING).sum() == 1


def test_a_second_round_follows_a_first_that_widened_the_fits():
    """One response gains a ninth mode; another is asked again for the one it really has."""
    campaign = invent_campaign(
        seed=6, units=6, heads=2, story=SOUND, bench=InventedBench(points=500)
    )
    responses = to_dataset(campaign)
    values = responses["frequency_response"]
    plant = campaign.responses[0].plant
    moved = replace(plant, modal_frequency=plant.modal_frequency * 1.1)
    values[0, 0, 0] += _term(campaign, moved, 5)
    values[3, 0, 0] -= _term(campaign, campaign.responses[3].plant, 1)
    fits = fit_modes(responses)
    assert fits.sizes["mode"] == 9
    for row in (0, 3):
        fifth = campaign.responses[row].plant.modal_frequency[4]
        _forget(fits, row, int(np.nanargmin(np.abs(fits["modal_frequency"].values[row] - fifth))))
    narrow = [name for name in fits["parameter"].values if not name.endswith("_9")]
    fits = fits.isel(mode=slice(0, 8)).sel(parameter=narrow, parameter_other=narrow)
    paired = pair_modes(fits, responses)
    assert paired["mode_found_warm_mask"].sel(mode="M5").values[[0, 3]].all()
    assert paired["mode_outcome"].sel(mode="M2").values[3] == Outcome.MODE_MISSING


@pytest.fixture
def asked(monkeypatch):
    """Return the names of the responses that are refitted; every start must be finite."""
    names = []
    real = warm_refit.refit_modes

    def refit(responses, starts, *arguments, **options):
        names.extend(starts)
        for start in starts.values():
            values = [value for value in vars(start).values() if not isinstance(value, str)]
            assert all(np.isfinite(value).all() for value in values)
        return real(responses, starts, *arguments, **options)

    monkeypatch.setattr(warm_refit, "refit_modes", refit)
    return names


def test_a_mode_known_from_one_response_only_starts_no_refit(asked, capfd):
    """What has no estimate yet is NaN; a start of it made LAPACK complain on the terminal."""
    campaign = invent_campaign(
        seed=6, units=2, heads=1, temperatures=(25.0,), story=SOUND, bench=InventedBench(points=500)
    )
    responses = to_dataset(campaign)
    fits = fit_modes(responses)
    _forget(fits, 0, 3)
    pair_modes(fits, responses)
    assert asked == []
    assert "DLASCL" not in "".join(capfd.readouterr())


def test_a_response_without_a_fit_is_not_refitted(asked):
    campaign = invent_campaign(
        seed=6, units=6, heads=1, story=SOUND, bench=InventedBench(points=500)
    )
    responses = to_dataset(campaign)
    fits = fit_modes(responses)
    for name in fits.data_vars:
        if fits[name].dtype.kind == "f":
            fits[name][2] = np.nan
    fits["fit_outcome"][2] = Outcome.NOT_FINITE
    _forget(fits, 0, 3)
    pair_modes(fits, responses)
    assert asked == [str(fits["response"].values[0])]


def _term(campaign, plant, mode):
    s = 2j * np.pi * campaign.frequency
    natural = 2.0 * np.pi * plant.modal_frequency[mode]
    term = plant.residue[mode] / (s**2 + 2.0 * plant.damping_ratio[mode] * natural * s + natural**2)
    return term * np.exp(-s * plant.delay)


def _forget(fits, row, place):
    """Take one mode out of a fit, as if it had been overlooked."""
    for name in (
        "modal_frequency",
        "damping_ratio",
        "mode_significance",
        "residue",
        "residue_rate",
    ):
        values = fits[name].values
        values[row, place:-1] = values[row, place + 1 :].copy()
        values[row, -1] = np.nan
