"""Screening: marks what is odd, leaves genuine spread alone, drops nothing."""

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.grids import gather
from identkit.stages.screen import mark_sentences, marked_responses, screen
from identkit.synthetic import InventedBench, InventedSpread, Story, invent_campaign, to_dataset

BENCH = InventedBench(points=500)
SOUND = Story(odd_lot="none", cracked_unit="none")


def responses(seed=1, **changes):
    options = {"units": 12, "bench": BENCH, "story": SOUND} | changes
    return to_dataset(invent_campaign(seed=seed, **options))


def outliers(screening):
    mark = screening["response_mark"].sel(mark="outlier")
    return set(screening["response"].values[mark.values].tolist())


def test_a_band_without_points_is_refused_with_the_range_of_the_data():
    measured = responses(units=2)
    low, high = measured["frequency"].values[[0, -1]]
    with pytest.raises(InputError, match=f"band.* the data run from {low:.6g} to {high:.6g} Hz"):
        screen(measured, band=(1e6, 2e6))


@pytest.mark.parametrize("seed", range(3))
def test_only_the_cracked_unit_is_marked(seed):
    measured = responses(seed, units=24, story=Story())
    found = outliers(screen(measured))
    cracked = set(measured["response"].values[measured["unit"].values == "U13"].tolist())
    assert found <= cracked
    assert len(found) >= 10  # of 12


@pytest.mark.parametrize("seed", range(3))
def test_genuine_spread_and_temperature_are_left_alone(seed):
    spread = InventedSpread(unit_frequency=0.012, unit_residue=0.15, unit_gain=0.08)
    measured = responses(seed, spread=spread, temperatures=(-10.0, 25.0, 70.0))
    assert outliers(screen(measured)) == set()


@pytest.mark.parametrize("spoil", ["gain", "polarity"])
def test_a_wrong_gain_or_polarity_is_marked(spoil):
    measured = responses().copy(deep=True)
    measured["frequency_response"][5] *= {"gain": 2.0, "polarity": -1.0}[spoil]
    if spoil == "gain":
        measured["frequency_response_variance"][5] *= 4.0
    found = screen(measured)
    assert outliers(found) == {str(measured["response"].values[5])}


def test_marks_carry_value_limit_and_reason():
    measured = responses().copy(deep=True)
    noisy, short = (str(measured["response"].values[k]) for k in (3, 7))
    measured["frequency_response_variance"][3] *= 2000.0
    measured["frequency_response"][7, :, :, 40:] = np.nan
    found = screen(measured)
    assert found["response_mark"].sel(response=noisy, mark="noise")
    assert found["response_mark"].sel(response=short, mark="too-few-points")
    assert found["response_mark_value"].sel(response=short, mark="too-few-points") == 40
    assert found["response_mark_limit"].sel(response=short, mark="too-few-points") == 50
    sentences = mark_sentences(found)
    assert any(s.startswith(f"{noisy}: noise, median relative") for s in sentences)
    assert any(s.startswith(f"{short}: too few points, 40 usable") for s in sentences)
    assert any("460 of 72000 points marked: missing" in s for s in sentences)
    assert found["response"].equals(measured["response"])
    reasons = marked_responses(found, ["noise"])
    assert list(reasons) == [noisy]
    assert "limit 0.3" in reasons[noisy]


def test_points_are_marked_by_coherence_band_and_value():
    measured = responses().copy(deep=True)
    measured["coherence"][0, 0, 0, 10] = 0.3
    measured["frequency_response_variance"][0, 0, 0, 11] = np.inf
    measured["usable_mask"][0, 0, 0, 12] = False
    found = screen(measured, band=(100.0, 20000.0), coherence_limit=0.5)
    frequency = measured["frequency"].values
    outside = (frequency < 100.0) | (frequency > 20000.0)
    assert np.array_equal(found["outside_band_mask"].values[0, 0, 0], outside)
    assert found["low_coherence_mask"].values[0, 0, 0, 10]
    assert found["missing_mask"].values[0, 0, 0, [10, 11, 12]].tolist() == [False, True, True]
    marks = ["low_coherence_mask", "outside_band_mask", "missing_mask"]
    union = np.any([found[name].values for name in marks], axis=0)
    assert np.array_equal(found["usable_mask"].values, ~union)


def test_several_grids_are_screened_together():
    measured = responses(units=24, story=Story(), bench=InventedBench(points=1200))
    coarse = measured.isel(frequency=slice(None, None, 2), response=slice(0, 150))
    fine = measured.isel(response=slice(150, None))
    found = screen(gather([coarse, fine]))
    assert isinstance(found, xr.DataTree)
    marked = outliers(found["grid_1"].to_dataset()) | outliers(found["grid_2"].to_dataset())
    assert marked <= set(measured["response"].values[measured["unit"].values == "U13"].tolist())
    assert len(marked) >= 10
    for name, part in (("grid_1", coarse), ("grid_2", fine)):
        assert found[name]["usable_mask"].shape == part["frequency_response"].shape
    assert mark_sentences(found)


def test_without_labels_variance_or_peers_nothing_is_invented():
    measured = responses().isel(response=slice(0, 3))
    bare = measured[["frequency_response"]].reset_coords(drop=True)
    found = screen(bare)
    assert np.isnan(found["response_mark_value"].sel(mark=["noise", "outlier"])).all()
    assert not found["response_mark"].any()


def test_an_all_missing_response_is_marked_short_and_nothing_else():
    measured = responses().copy(deep=True)
    measured["frequency_response"][2] = np.nan
    found = screen(measured)
    row = found.isel(response=2)
    assert row["response_mark"].values.tolist() == [False, False, True]
