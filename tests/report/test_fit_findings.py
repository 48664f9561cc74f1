"""The verdict warns where fits are no stand-in for what was measured."""

import numpy as np
import pytest
import xarray as xr

from identkit.report.contents import ReportInput
from identkit.report.fit_findings import poor_fits_sentence, variance_sentence


def given(left, noise, source="coherence"):
    table = xr.Dataset(
        {
            "unexplained_share": ("response", np.array(left)),
            "noise_ratio": ("response", np.array(noise)),
        },
        coords={"response": [f"r{k}" for k in range(len(left))]},
        attrs={"variance_source": source},
    )
    return ReportInput("study", xr.Dataset(), fits=table, modes=table)


def test_good_fits_need_no_word():
    assert poor_fits_sentence(given([0.02, 0.04], [1.0, 1.1])) == ""


def test_noise_that_was_stated_is_no_poor_fit():
    assert poor_fits_sentence(given([0.3, 0.3], [1.0, 1.2])) == ""


@pytest.mark.parametrize("noise", [7.0, np.nan])
def test_a_rest_beyond_the_noise_is_named(noise):
    said = poor_fits_sentence(given([0.02, 0.25, 0.12], [1.0, noise, noise]))
    assert said.startswith("2 fits of 3 leave more than 10 %")
    assert "25 %, r1" in said


def test_an_estimated_variance_is_said():
    assert variance_sentence(given([0.1], [1.0])) == ""
    assert "estimated" in variance_sentence(given([0.1], [np.nan], "residuals"))
