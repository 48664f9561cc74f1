"""Noise ratios and the worst fit."""

import numpy as np
from numpy.testing import assert_allclose

from identkit.figures.fit_quality import RESIDUAL_95, draw_fit_quality, pick_fit_quality
from identkit.figures.style import NARROW, WIDE


def test_worst_fit_is_the_largest_noise_ratio(study):
    fits = study.modes.copy(deep=True)
    fits["noise_ratio"].values[4] = 7.0
    picked = pick_fit_quality(fits, study.responses)
    assert picked.worst_name == "U02, head 0, 10 °C"
    measured = study.responses["frequency_response"].values[4, 0, 0, :]
    assert_allclose(picked.measured, 20 * np.log10(np.abs(measured)))


def test_residuals_of_the_truth_are_complex_gaussian(study):
    picked = pick_fit_quality(study.modes, study.responses)
    inside = np.mean(picked.residual < RESIDUAL_95)
    # 300 points: 95 % within four standard errors, variance estimated from coherence
    assert abs(inside - 0.95) < 4 * np.sqrt(0.95 * 0.05 / 300)


def test_expected_band_follows_the_degrees_of_freedom(study):
    picked = pick_fit_quality(study.modes, study.responses)
    degrees = 2 * 300 - (5 + 3 * 8)
    assert_allclose(picked.expected, 1 + np.array([-1.96, 1.96]) * np.sqrt(2 / degrees))


def test_drawing_keeps_every_ratio(study):
    picked = pick_fit_quality(study.modes, study.responses)
    for layout in (WIDE, NARROW):
        axes = draw_fit_quality(picked, layout).axes[0]
        drawn = [y for line in axes.lines[1:] for y in line.get_ydata()]
        assert_allclose(sorted(drawn), sorted(picked.noise_ratio))


def test_variance_from_residuals_has_no_noise_ratio(study):
    fits = study.modes.assign(noise_ratio=("response", np.full(24, np.nan)))
    responses = study.responses.drop_vars("frequency_response_variance")
    picked = pick_fit_quality(fits, responses)
    assert np.isnan(picked.noise_ratio).all()
    draw_fit_quality(picked)
