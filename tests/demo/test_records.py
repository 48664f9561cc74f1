"""Records of the invented bench, from files through the study to named modes."""

import json
from importlib.resources import files

import numpy as np
import pytest

from identkit.grids import load
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.pipeline import run_study
from identkit.synthetic_record_files import invent_bench_campaign, write_records

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def records_study(tmp_path_factory):
    """Results up to the pairing of modes, and the plants by response."""
    folder = tmp_path_factory.mktemp("records")
    write_records(folder, invent_bench_campaign(units=4, heads=2))
    study = folder / "study.toml"
    text = files("identkit").joinpath("demo_records_study.toml").read_text(encoding="utf-8")
    study.write_text(text, encoding="utf-8")
    results = run_study(study, until="pair", jobs=2).folder
    rows = json.loads((folder / "truth.json").read_text(encoding="utf-8"))["responses"]
    return results, {row["response"]: _plant(row["plant"]) for row in rows}


def _plant(values):
    arrays = {k: np.array(v) if isinstance(v, list) else v for k, v in values.items()}
    return ModalParameters(**arrays)


def test_the_record_cut_short_is_named_and_the_rest_goes_on(records_study):
    responses = load(records_study[0] / "responses.nc")
    skipped = json.loads(responses.attrs["skipped_files"])
    assert len(skipped) == 1
    assert "cannot be read" in skipped[0]["reason"]
    assert responses.sizes["response"] == 15


def test_estimated_responses_agree_with_the_truth(records_study):
    """Scaled squared errors of every response have mean 1, and none stands far out."""
    results, truth = records_study
    responses = load(results / "responses.nc")
    frequency = responses["frequency"].values
    means = []
    for k, name in enumerate(responses["response"].values):
        use = responses["usable_mask"].values[k, 0, 0]
        exact = modal_response(frequency, truth[str(name)])
        error = np.abs(responses["frequency_response"].values[k, 0, 0] - exact) ** 2
        scaled = (error / responses["frequency_response_variance"].values[k, 0, 0])[use]
        assert use.sum() > 500
        assert scaled.max() < 25.0
        means.append(scaled.mean())
    assert np.mean(means) == pytest.approx(1.0, abs=0.06)
    assert np.max(np.abs(np.array(means) - 1.0)) < 0.25


def test_modes_are_found_with_honest_errors(records_study):
    """All eight modes of every device; errors over standard errors have unit spread."""
    results, truth = records_study
    modes = load(results / "modes.nc")
    scaled = np.array(
        [
            (modes["modal_frequency"].values[k, :8] - truth[str(name)].modal_frequency)
            / modes["modal_frequency_standard_error"].values[k, :8]
            for k, name in enumerate(modes["response"].values)
        ]
    )
    assert scaled.shape == (15, 8)
    assert np.isfinite(scaled).all()
    assert np.sqrt(np.mean(scaled**2)) == pytest.approx(1.0, abs=0.2)
    assert 0.9 < np.mean(np.abs(scaled) < 1.96) <= 1.0
