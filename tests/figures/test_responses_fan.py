"""Bands over all responses."""

import numpy as np
import xarray as xr
from numpy.testing import assert_allclose

from identkit.figures.responses_fan import PERCENTILES, draw_responses_fan, pick_responses_fan
from identkit.figures.style import NARROW, WIDE
from identkit.grids import gather


def test_bands_are_percentiles_of_the_measured_points(study):
    picked = pick_responses_fan(study.responses)
    measured = 20 * np.log10(np.abs(study.responses["frequency_response"].values[:, 0, 0, :]))
    assert_allclose(picked.frequency, study.campaign.frequency)
    assert_allclose(picked.magnitude, np.percentile(measured, PERCENTILES, axis=0))
    assert picked.count == study.responses.sizes["response"]
    assert picked.unit == "um/A"
    assert picked.reference_name == "median"


def test_masked_points_do_not_count(study):
    responses = study.responses.copy(deep=True)
    responses["usable_mask"].values[0, 0, 0, 40] = False
    responses["frequency_response"].values[0, 0, 0, 40] = 1e9
    picked = pick_responses_fan(responses)
    assert picked.magnitude[-1, 40] < 150.0


def test_nominal_is_the_reference_and_a_response_can_be_shown_by_itself(study):
    frequency = study.campaign.frequency
    nominal = study.responses["frequency_response"].values[2, 0, 0, :]
    name = str(study.responses["response"].values[2])
    picked = pick_responses_fan(
        study.responses, nominal_frequency=frequency, nominal_response=nominal, highlight=name
    )
    assert picked.reference_name == "nominal"
    assert picked.highlight_name.startswith("U01")
    assert_allclose(picked.reference_magnitude, 20 * np.log10(np.abs(nominal)), atol=1e-6)
    assert_allclose(picked.highlight_ratio, 0.0, atol=1e-6)
    assert_allclose(picked.highlight_phase, picked.reference_phase, atol=1e-6)


def test_several_grids_share_one_axis_without_inventing_points(study):
    low = study.responses.isel(frequency=slice(0, 150), response=slice(0, 3))
    high = study.responses.isel(frequency=slice(150, 300), response=slice(3, None))
    picked = pick_responses_fan(gather([low, high]))
    assert picked.count == study.responses.sizes["response"]
    assert picked.frequency[0] == study.campaign.frequency[0]
    assert picked.frequency[-1] == study.campaign.frequency[-1]
    bottom = picked.frequency < low["frequency"].values[-1]
    own = 20 * np.log10(np.abs(low["frequency_response"].values[:, 0, 0, :]))
    assert np.nanmax(picked.magnitude[:, bottom]) <= own.max() + 1e-9


def test_a_point_missing_everywhere_leaves_a_gap(study):
    responses = study.responses.copy(deep=True)
    responses["frequency_response"].values[:, :, :, 7] = np.nan
    picked = pick_responses_fan(responses)
    assert np.isnan(picked.magnitude[:, 7]).all()
    assert np.isfinite(picked.magnitude[:, 8]).all()
    draw_responses_fan(picked)


def test_drawing_shows_bands_not_curves(study):
    picked = pick_responses_fan(study.responses)
    for layout in (WIDE, NARROW):
        figure = draw_responses_fan(picked, layout)
        magnitude, ratio, phase = figure.axes
        assert len(magnitude.lines) == 2  # the reference and its entry in the legend
        assert len(ratio.lines) == len(phase.lines) == 1
        assert len(ratio.collections) == 3
        assert_allclose(magnitude.lines[0].get_ydata(), picked.reference_magnitude)
        assert figure.get_figwidth() == layout.width


def test_labels_that_look_like_formulas_stay_text(study):
    responses = study.responses.assign_attrs(output_unit="$\\frac{1}{", input_unit="A")
    assert isinstance(responses, xr.Dataset)
    figure = draw_responses_fan(pick_responses_fan(responses))
    figure.canvas.draw()
    assert "$\\frac{1}{/A" in figure.axes[0].get_ylabel()
