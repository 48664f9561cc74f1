"""Population: recovers the invented truth, keeps noise out of spread, says what it cannot tell."""

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.outcomes import Outcome
from identkit.stages.pair import pair_modes
from identkit.stages.population import describe_population
from identkit.synthetic import (
    BASE_RESIDUE,
    HEAD_SIGNS,
    MODES,
    InventedSpread,
    Story,
    invent_campaign,
)
from tests.stages.invented_fits import FitErrors, invented_fits

SOUND = Story(odd_lot="none", cracked_unit="none")


def paired(seed=1, errors=None, **changes):
    campaign = invent_campaign(seed=seed, **({"story": SOUND} | changes))
    return pair_modes(invented_fits(campaign, errors or FitErrors(), seed))


@pytest.fixture(scope="module")
def modes():
    return paired(errors=FitErrors(missing=0.03, extra=0.2))


@pytest.fixture(scope="module")
def population(modes):
    return describe_population(modes)


def test_values_and_slopes_are_the_invented_ones(population):
    spread = InventedSpread()
    frequency = population.sel(quantity="modal_frequency")
    truth = np.array([mode.frequency for mode in MODES])
    slope = np.array([mode.frequency_slope for mode in MODES])
    error = frequency["population_value_standard_error"].values
    # five standard errors over eight modes; the error itself is that of 24 units
    assert (np.abs(frequency["population_value"].values - truth) < 4.0 * error).all()
    assert error / truth == pytest.approx(spread.unit_frequency / np.sqrt(24.0), rel=0.5)
    assert frequency["temperature_slope"].values == pytest.approx(slope, abs=5e-6)
    damping = population.sel(quantity="damping_ratio")["temperature_slope"].values
    assert damping == pytest.approx([mode.damping_slope for mode in MODES], abs=4e-4)


def test_spreads_are_the_invented_ones(population):
    spread = InventedSpread()
    frequency = population.sel(quantity="modal_frequency")
    damping = population.sel(quantity="damping_ratio")
    residue = population.sel(quantity="residue")
    # 24 units: a standard deviation is known to 15 %, over 8 modes together to 5 %
    pooled = {
        spread.unit_frequency: frequency["unit_deviation"],
        spread.unit_damping: damping["unit_deviation"],
        np.hypot(spread.unit_residue, spread.unit_gain): residue["unit_deviation"],
        spread.head_frequency: frequency["head_deviation"],
        spread.head_damping: damping["head_deviation"],
        spread.head_residue: residue["head_deviation"],
    }
    for truth, found in pooled.items():
        assert np.sqrt((found.values**2).mean()) == pytest.approx(truth, rel=0.16)
    assert frequency["residual_deviation"].values.max() < 1e-4
    error = frequency["unit_deviation_standard_error"].values
    assert error == pytest.approx(frequency["unit_deviation"].values / np.sqrt(46.0), rel=0.15)


def test_noisy_fits_do_not_widen_the_spread():
    noisy = paired(seed=2, errors=FitErrors(frequency=0.004, damping=0.2, residue=0.1))
    found = describe_population(noisy).sel(quantity="modal_frequency")
    pooled = np.sqrt((found["head_deviation"].values ** 2).mean())
    assert pooled == pytest.approx(InventedSpread().head_frequency, rel=0.2)
    assert found["fit_deviation"].values == pytest.approx(0.0043, rel=0.1)
    # the variance of 0.4 % of fit error is itself known to 9 % from 250 residuals: what may be
    # left over is up to sqrt(0.09) of 0.43 %
    assert found["residual_deviation"].values.max() < 0.0018


def test_heads_keep_their_signs_and_the_mean_is_over_heads(population):
    residue = population["head_value"].sel(quantity="residue")
    for k, mode in enumerate(MODES):
        truth = BASE_RESIDUE * (mode.share + mode.sway * HEAD_SIGNS)
        # units spread by 6.5 %: a mean over 24 is known to 1.3 %
        assert residue.values[k] == pytest.approx(truth, rel=0.05)
    assert set(np.sign(residue.sel(mode="M7").values)) == {-1.0, 1.0}
    mean = population["population_value"].sel(quantity="residue").values
    assert mean == pytest.approx(residue.mean("head").values, rel=1e-9, abs=1.0)


def test_base_feedthrough_and_delay_stand_beside(population):
    assert float(population["base_frequency"]) == pytest.approx(72.0, rel=1e-3)
    assert float(population["delay"]) == pytest.approx(11e-6, rel=0.02)
    base = population.sel(base_quantity="base_residue")
    assert float(base["base_unit_deviation"]) == pytest.approx(InventedSpread().unit_gain, rel=0.4)
    assert population.attrs["base"] == "pivot"
    assert population.attrs["reference_temperature"] == 25.0


def test_the_reference_temperature_moves_the_values(modes, population):
    warm = describe_population(modes, reference_temperature=50.0)
    ratio = warm["population_value"] / population["population_value"]
    slope = population["temperature_slope"]
    logarithmic = ["modal_frequency", "damping_ratio"]
    assert np.log(ratio.sel(quantity=logarithmic)).values == pytest.approx(
        25.0 * slope.sel(quantity=logarithmic).values, abs=1e-6
    )


def test_unit_effects_correlate_through_the_gain():
    spread = InventedSpread(unit_residue=0.01, head_residue=0.01, unit_gain=0.10)
    found = describe_population(paired(seed=3, spread=spread))
    residues = [name for name in found["effect"].values if name.endswith(":residue")]
    correlation = found["unit_effect_correlation"].sel(effect=residues, effect_other=residues)
    assert correlation.values.min() > 0.6
    whole = found["unit_effect_correlation"].values
    assert np.linalg.eigvalsh(whole).min() > 0.0
    assert np.array_equal(whole, whole.T)


def test_the_odd_lot_shows_in_the_lot_effect():
    found = describe_population(paired(seed=4, story=Story(cracked_unit="none")))
    effect = found["lot_effect"].sel(effect="M3:modal_frequency")
    others = effect.sel(lot=["A", "B", "D"]).mean()
    assert float(effect.sel(lot="C") - others) == pytest.approx(np.log(1.03), abs=0.008)


def test_shifted_modes_do_not_widen_the_population():
    whole = paired(seed=5, story=Story(odd_lot="none"))
    assert (whole["mode_outcome"] == Outcome.MODE_SHIFTED).any()
    found = describe_population(whole).sel(quantity="modal_frequency")
    assert found["unit_deviation"].values.max() < 0.010
    assert found["responses_shifted"].values.tolist() == [0, 12, 0, 12, 0, 0, 0, 0]


def test_a_mode_that_is_always_out_of_band_still_has_a_value(modes):
    outside = modes.copy(deep=True)
    outside["mode_outcome"].loc[{"mode": "M8"}] = Outcome.MODE_OUT_OF_BAND
    found = describe_population(outside).sel(mode="M8", quantity="modal_frequency")
    assert float(found["population_value"]) == pytest.approx(18400.0, rel=0.01)


def test_missing_labels_are_said_and_survived(modes):
    bare = modes.drop_vars(["unit", "head", "temperature", "lot", "measured_at"])
    found = describe_population(bare)
    assert "no unit label" in found.attrs["notes"]
    assert "no temperature label" in found.attrs["notes"]
    assert np.isnan(found["head_deviation"]).all()
    assert np.isnan(found["residual_deviation"]).all()
    assert np.isfinite(found["unit_deviation"]).all()
    assert (found["temperature_slope"] == 0.0).all()
    assert found["head"].values.tolist() == ["all"]
    assert "lot_effect" not in found


def test_a_few_missing_labels_are_not_taken_for_one_unit(modes):
    some = modes.copy(deep=True)
    unit = modes["unit"].values.astype("<U12")
    unit[:3] = ""
    lot = modes["lot"].values.astype("<U12")
    lot[:12] = ""
    some = some.assign_coords(unit=("response", unit), lot=("response", lot))
    found = describe_population(some)
    assert "3 responses have no unit label" in found.attrs["notes"]
    assert found.sizes["unit"] == 27
    assert "not labelled" in found["lot"].values


def test_matrix_plants_have_one_residue_quantity_per_channel(modes):
    channel = [name for name in modes.data_vars if "output" in modes[name].dims]
    twice = {name: xr.concat([modes[name], 2.0 * modes[name]], "output") for name in channel}
    wide = modes.drop_vars([*channel, "output"]).assign(
        {name: value.assign_coords(output=["a", "b"]) for name, value in twice.items()}
    )
    found = describe_population(wide)
    assert found["quantity"].values.tolist() == [
        "modal_frequency",
        "damping_ratio",
        "residue_1_1",
        "residue_2_1",
    ]
    first, second = (
        found["population_value"].sel(quantity=f"residue_{k}_1").values for k in (1, 2)
    )
    assert second == pytest.approx(2.0 * first, rel=1e-6)
    assert "base_residue_2_1" in found["base_quantity"].values


def test_one_temperature_gives_no_slope():
    found = describe_population(paired(seed=6, units=8, temperatures=(40.0,)))
    assert "one temperature (40)" in found.attrs["notes"]
    assert np.isnan(found["temperature_slope_standard_error"]).all()


def test_a_position_effect_is_found_and_kept_out_of_the_spread(modes):
    rng = np.random.default_rng(7)
    radius = rng.uniform(20.0, 45.0, modes.sizes["response"])
    moved = modes.copy(deep=True).assign_coords(position=("response", radius))
    moved["modal_frequency"] = modes["modal_frequency"] * np.exp(4e-4 * (moved["position"] - 32.0))
    found = describe_population(moved).sel(quantity="modal_frequency")
    assert found["position_slope"].values == pytest.approx(4e-4, abs=2e-5)
    assert found["residual_deviation"].values.max() < 2e-4


def test_one_unit_or_one_response_says_nothing_about_units(modes):
    one = modes.sel(response=modes["unit"] == "U02")
    found = describe_population(one)
    assert np.isnan(found["unit_deviation"]).all()
    single = describe_population(modes.isel(response=[0]))
    seen = single["responses_found"].values == 1
    assert np.isfinite(single["population_value"].values[seen]).all()
    assert np.isnan(single["unit_deviation"]).all()


def test_responses_can_be_left_out_by_name(modes):
    names = modes["response"].values[modes["unit"].values == "U07"].tolist()
    found = describe_population(modes, leave_out=names)
    assert found.attrs["responses"] == 276
    assert "U07" not in found["unit"].values


def test_nothing_to_describe_is_refused(modes):
    with pytest.raises(InputError, match="none left of 288 responses"):
        describe_population(modes, leave_out=modes["response"].values.tolist())
