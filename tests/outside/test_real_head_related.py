"""An ear heard from 72 directions: a measured family that follows no short modal model.

Data: W. G. Gardner and K. D. Martin, *HRTF Measurements of a KEMAR Dummy-Head Microphone*, MIT
Media Lab, 1994 (datasets/head_related_responses). No variance comes with them, their delay differs
with direction, and residuals of any fit are far above the noise: what the tool says about such data
is under test. References outside the project: scipy's AAA (Nakatsukasa, Sete and Trefethen 2018)
and the delay around a rigid sphere (R. S. Woodworth, *Experimental Psychology*, 1938).
"""

import json
import warnings
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scipy.interpolate import AAA

from identkit.grids import save
from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_model import modal_response
from identkit.pipeline import run_study
from identkit.plant_set.files import load_set
from identkit.plant_set.response import plant_response

FOLDER = Path(__file__).parents[2] / "datasets" / "head_related_responses"
STUDY = """
[study]
name = "ear"

[responses]
files = "ear.nc"
band = [200, 6000]

[model]
base = "none"
residues = "general"
"""

COMMON_DELAY = 0.6e-3

pytestmark = pytest.mark.outside


@pytest.fixture(scope="module")
def ear():
    with xr.open_dataset(FOLDER / "horizontal_left.nc", engine="h5netcdf") as data:
        return data.load()


def responses(ear):
    return ear["frequency_response"].values[:, 0, 0]


def relative_error(found, measured):
    return np.linalg.norm(found - measured) / np.linalg.norm(measured)


def rational_error(frequency, response, delay, modes):
    """Return what AAA with as many pole pairs leaves of the response turned by the same delay."""
    turned = response * np.exp(2j * np.pi * frequency * delay)
    both = np.concatenate([-frequency[::-1], frequency])
    values = np.concatenate([turned[::-1].conj(), turned])
    points = 1j * both / frequency[-1]
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "AAA failed to converge", RuntimeWarning)
        approximation = AAA(points, values, max_terms=2 * modes + 1, clean_up=False)
    return relative_error(approximation(points), values)


def test_near_ear_hears_more_and_earlier(ear):
    """Facts of the data: the near side is louder; the far side waits as around a sphere."""
    frequency, measured = ear["frequency"].values, responses(ear)
    near, far = (measured[ear["azimuth"].values == side][0] for side in (90.0, 270.0))
    assert np.linalg.norm(near) > 3.0 * np.linalg.norm(far)
    low = frequency < 1500.0
    turn = np.unwrap(np.angle(near[low] / far[low]))
    later = np.polyfit(frequency[low], turn, 1)[0] / (2.0 * np.pi)
    sphere = 0.0875 / 343.0 * (np.pi / 2.0 + 1.0)
    assert later == pytest.approx(sphere, rel=0.1)


@pytest.mark.parametrize("azimuth", range(0, 360, 30))
def test_fit_leaves_no_more_than_a_rational_approximation_of_equal_order(ear, azimuth):
    frequency = ear["frequency"].values
    measured = responses(ear)[ear["azimuth"].values == azimuth][0]
    fit = fit_modal_model(frequency, measured, None, base="none", residues="general")
    plant = fit.parameters
    left = relative_error(modal_response(frequency, plant), measured)
    assert left < rational_error(frequency, measured, plant.delay, plant.modal_frequency.size)
    assert left < 0.35


def run_ear_study(folder, ear):
    """Run one study on all directions; a delay that all of them share is taken out first."""
    nearer = ear.copy(deep=True)
    turn = np.exp(2j * np.pi * ear["frequency"] * COMMON_DELAY)
    nearer["frequency_response"] = ear["frequency_response"] * turn
    save(nearer, folder / "ear.nc")
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    return run_study(folder / "study.toml", jobs=1)


def matrices_response(matrices, frequency):
    """Evaluate C (jw - A)^-1 B + D from the numbers of the set file alone."""
    a, b, c, d = (np.asarray(matrices[name], dtype=float) for name in "ABCD")
    points = 2j * np.pi * frequency
    return np.array([(c @ np.linalg.solve(s * np.eye(len(a)) - a, b) + d)[0, 0] for s in points])


@pytest.mark.slow
def test_one_study_holds_every_measured_direction(ear, tmp_path):
    result = run_ear_study(tmp_path, ear)
    assert result.held
    assert result.report.is_file()
    contents = json.loads((result.folder / "set.json").read_text(encoding="utf-8"))
    measured = contents["certificate"]["measured"]
    assert (measured["held"], measured["of"], measured["excluded"]) == (72, 72, [])
    # the fitted plants of the file against its own nominal and weight, by plain linear algebra
    frequency = np.linspace(*contents["band"], 400)
    nominal = matrices_response(contents["nominal"], frequency)
    weight = np.abs(matrices_response(contents["weights"]["left"], frequency))
    plants = load_set(result.folder / "set.h5").plants
    assert len(plants) == 72
    reach = [np.max(np.abs(plant_response(p, frequency) / nominal - 1.0) / weight) for p in plants]
    assert 0.9 < max(reach) <= 1.0 + 1e-6
