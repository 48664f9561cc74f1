"""One reflection swept three times: what repeats alone scatter, and a set that holds them.

Data: datasets/reflection_repeats (shipped in scikit-rf, BSD). The non-parametric spread
|S_i - mean| / |mean| is a fact of the data and needs no model.
"""

import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from identkit.grids import load
from identkit.pipeline import run_study
from identkit.plant_set.files import load_set

FOLDER = Path(__file__).parents[2] / "datasets" / "reflection_repeats"

STUDY = """
[study]
name = "repeats"

[responses]
files = "sweep_{repeat}.csv"
columns = { frequency = "Freq [GHz]" }

[model]
base = "none"
residues = "general"

[bound]
radius_floor = 0.044   # repeats scatter by up to 4.38 %; the fits take that for noise
"""

pytestmark = pytest.mark.outside


def sweeps():
    tables = [np.loadtxt(FOLDER / f"sweep_{n}.csv", delimiter=",", skiprows=1) for n in (1, 2, 3)]
    return tables[0][:, 0] * 1e9, np.array([t[:, 1] + 1j * t[:, 2] for t in tables])


def spread(responses):
    mean = responses.mean(axis=0)
    return np.abs(responses - mean) / np.abs(mean)


def test_spread_is_what_the_page_states():
    found = spread(sweeps()[1])
    assert np.median(found) == pytest.approx(0.00250, abs=5e-6)
    assert found.max() == pytest.approx(0.0438, abs=5e-5)


def test_extract_is_the_file_that_scikit_rf_ships():
    """Compare with the copy inside the installed library, line by line."""
    skrf = pytest.importorskip("skrf")
    frequency, responses = sweeps()
    for number, response in enumerate(responses, start=1):
        network = skrf.Network(str(Path(skrf.__file__).parent / "data" / f"ro,{number}.s1p"))
        np.testing.assert_allclose(frequency, network.f, rtol=1e-12)
        np.testing.assert_allclose(response, network.s[:, 0, 0], atol=1e-11)


@pytest.mark.slow
def test_exported_set_holds_the_repeats(tmp_path):
    """The fits are held, and no measured point is clearly outside once its noise is allowed for."""
    for number in (1, 2, 3):
        shutil.copy(FOLDER / f"sweep_{number}.csv", tmp_path)
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    result = run_study(tmp_path / "study.toml", jobs=1)
    assert result.held
    table = pd.read_csv(result.folder / "audit.csv")
    assert table["fit_verdict"].tolist() == ["held"] * 3
    assert not (table["raw_verdict"] == "not held").any()
    assert (result.folder / "set.json").is_file()
    radii = load_set(result.folder / "set.json").radii
    frequency, measured = sweeps()
    weight = np.interp(frequency, radii.frequency, radii.weight_magnitude)
    assert np.all(spread(measured) <= weight)
    fits = load(result.folder / "fits.nc")
    assert (fits["delay"].values >= 0.0).all()
