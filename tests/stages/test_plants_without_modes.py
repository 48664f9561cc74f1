"""Plants without resonances: a gain, a feedthrough and a delay go through every stage."""

import json

import numpy as np
import pytest
import xarray as xr

from identkit import grids
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.outcomes import Outcome
from identkit.pipeline import run_study
from identkit.stages.bound import bound_spread
from identkit.stages.fit import fit_modes
from identkit.stages.nominal import choose_nominal
from identkit.stages.pair import pair_modes
from identkit.stages.population import describe_population

FREQUENCY = np.geomspace(20.0, 5000.0, 150)
GAINS = (0.95, 1.0, 1.04, 1.1)
NOISE = 0.004
NONE = np.zeros(0)

STUDY = """
[study]
name = "smooth"

[responses]
files = "smooth.nc"

[model]
base = "none"
"""


def smooth(gain: float, *, mode: float = 0.0) -> ModalParameters:
    """Return a gain with a delay of 5 us, and a resonance at `mode` Hz where asked."""
    if not mode:
        return ModalParameters(NONE, NONE, NONE, NONE, "none", feedthrough=gain, delay=5e-6)
    natural = 2.0 * np.pi * mode
    modes = [np.array([each]) for each in (mode, 0.02, 0.02 * natural**2 * gain, 0.0)]
    return ModalParameters(*modes, "none", feedthrough=gain, delay=5e-6)


def measured(plants: list[ModalParameters]) -> xr.Dataset:
    rng = np.random.default_rng(5)
    values = np.array([modal_response(FREQUENCY, plant) for plant in plants])
    deviation = NOISE * np.abs(values)
    noise = rng.standard_normal((2, *values.shape)) * deviation / np.sqrt(2.0)
    dims = ("response", "output", "input", "frequency")
    names = [f"U{k + 1:02d}" for k in range(len(plants))]
    return xr.Dataset(
        {
            "frequency_response": (dims, (values + noise[0] + 1j * noise[1])[:, None, None]),
            "frequency_response_variance": (dims, (deviation**2)[:, None, None]),
        },
        coords={
            "response": names,
            "unit": ("response", names),
            "output": ["position"],
            "input": ["drive"],
            "frequency": FREQUENCY,
        },
        attrs={"input_unit": "A", "output_unit": "um", "sample_period": 0.0},
    )


@pytest.fixture(scope="module")
def responses() -> xr.Dataset:
    return measured([smooth(gain) for gain in GAINS])


@pytest.fixture(scope="module")
def modes(responses: xr.Dataset) -> xr.Dataset:
    return pair_modes(fit_modes(responses, base="none"), responses)


def test_the_population_has_no_mode_but_a_gain_and_a_delay(modes: xr.Dataset) -> None:
    assert (modes["fit_outcome"] == Outcome.NO_MODES).all()
    assert modes.sizes["mode"] == 0
    assert (modes["unexplained_share"] < 2.0 * NOISE).all()
    population = describe_population(modes)
    assert population.sizes["mode"] == 0
    assert float(population["feedthrough"]) == pytest.approx(np.mean(GAINS), rel=1e-3)
    assert float(population["delay"]) == pytest.approx(5e-6, rel=0.05)


def test_an_empty_population_can_be_stored_and_read(modes: xr.Dataset, tmp_path) -> None:
    for name, data in (("modes", modes), ("population", describe_population(modes))):
        grids.save(data, tmp_path / f"{name}.nc")
        again = grids.load(tmp_path / f"{name}.nc")
        assert isinstance(again, xr.Dataset)
        assert dict(again.sizes) == dict(data.sizes)


def test_the_radius_is_the_spread_of_the_gains(modes: xr.Dataset) -> None:
    nominal = choose_nominal(modes, describe_population(modes), lines=FREQUENCY)
    assert nominal["mode"].size == 0
    spread = max(GAINS) / np.mean(GAINS) - 1.0
    np.testing.assert_allclose(nominal["nominal_radius"].values[0], spread, atol=0.002)
    bound = bound_spread(modes, nominal, order=1)
    assert bound["response_used"].all()
    assert float(bound["reach"].max()) == pytest.approx(1.0, abs=1e-6)


def test_a_campaign_without_modes_runs_to_its_report(responses: xr.Dataset, tmp_path) -> None:
    grids.save(responses, tmp_path / "smooth.nc")
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    result = run_study(tmp_path / "study.toml", jobs=1)
    assert result.held, result.verdict
    assert result.report is not None
    assert result.report.is_file()
    contents = json.loads((result.folder / "set.json").read_text(encoding="utf-8"))
    assert contents["certificate"]["measured"]["held"] == len(GAINS)
    assert [plant["response"] for plant in contents["plants"]]


def test_one_smooth_response_among_resonant_ones_is_bounded_like_any_other() -> None:
    responses = measured([smooth(gain, mode=900.0) for gain in GAINS] + [smooth(1.0)])
    modes = pair_modes(fit_modes(responses, base="none"), responses)
    assert modes["fit_outcome"].values[-1] == Outcome.NO_MODES
    assert modes["mode_in_population"].sum() == 1
    nominal = choose_nominal(modes, describe_population(modes), lines=FREQUENCY)
    bound = bound_spread(modes, nominal, order=4)
    assert bound["response_used"].all()


def test_a_fit_that_missed_the_delay_is_made_again_from_a_sister(responses: xr.Dataset) -> None:
    fits = fit_modes(responses, base="none")
    fits["delay"][2] = 0.0
    fits["feedthrough"][2] = 0.01
    modes = pair_modes(fits, responses)
    assert (modes["unexplained_share"] < 2.0 * NOISE).all()
    assert float(modes["feedthrough"][2, 0, 0]) == pytest.approx(GAINS[2], rel=0.01)


def test_a_response_that_is_noise_has_no_plant() -> None:
    responses = measured([smooth(gain) for gain in GAINS])
    rng = np.random.default_rng(2)
    noise = [rng.standard_normal(FREQUENCY.size) for _ in range(2)]
    responses["frequency_response"][1, 0, 0] = noise[0] + 1j * noise[1]
    responses["frequency_response_variance"][1, 0, 0] = 2.0
    modes = pair_modes(fit_modes(responses, base="none"), responses)
    assert modes["fit_outcome"].values[1] == Outcome.NO_MODES
    assert modes["unexplained_share"].values[1] > 0.5
    nominal = choose_nominal(modes, describe_population(modes), lines=FREQUENCY)
    bound = bound_spread(modes, nominal, order=1)
    assert bound["response_used"].values.tolist() == [True, False, True, True]
    assert bound["exclusion_reason"].values[1].startswith("no-modes")
    assert "of the response" in str(bound["exclusion_reason"].values[1])
