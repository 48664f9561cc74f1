from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.grids import load, save
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.state_space import StateSpace, frequency_response
from identkit.stages.bound import bound_spread
from identkit.stages.nominal import choose_nominal
from tests.methods.families import family, plant
from tests.stages.invented_modes import modes_dataset, population_dataset

LINES = np.geomspace(50.0, 22e3, 200)


def with_extra(parameters: ModalParameters) -> ModalParameters:
    """Add a mode no other plant has."""
    return replace(
        parameters,
        modal_frequency=np.append(parameters.modal_frequency, 15e3),
        damping_ratio=np.append(parameters.damping_ratio, 0.01),
        residue=np.append(parameters.residue, 1e7),
        residue_rate=np.append(parameters.residue_rate, 0.0),
    )


PLANTS = [*family(9, 5), with_extra(plant())]
GROWING = replace(plant(), damping_ratio=np.append(plant().damping_ratio[:-1], -0.01))
LEFT_OUT = {"r03": "unit U01: damaged"}


@pytest.fixture(scope="module")
def modes() -> xr.Dataset:
    data = modes_dataset([*PLANTS, plant(), GROWING], extra=1)
    data["fit_outcome"][10] = 5
    return data


@pytest.fixture(scope="module")
def nominal(modes: xr.Dataset) -> xr.Dataset:
    return choose_nominal(modes, population_dataset(plant()), lines=LINES, left_out=LEFT_OUT)


@pytest.fixture(scope="module")
def bound(modes: xr.Dataset, nominal: xr.Dataset) -> xr.Dataset:
    return bound_spread(modes, nominal, order=4, left_out=LEFT_OUT)


def test_written_matrices_hold_every_used_plant(nominal: xr.Dataset, bound: xr.Dataset) -> None:
    centre = StateSpace(*[nominal[f"nominal_{letter}"].values for letter in "ABCD"])
    weight = StateSpace(*[bound[f"weight_{letter}"].values for letter in "ABCD"])
    dense = np.geomspace(50.0, 22e3, 20001)
    base = frequency_response(centre, dense)[:, 0, 0]
    allowed = np.abs(frequency_response(weight, dense)[:, 0, 0])
    for k, one in enumerate(PLANTS):
        reach = np.max(np.abs(modal_response(dense, one) / base - 1.0) / allowed)
        if k == 3:
            continue
        assert reach <= 1.0 + 1e-6
        assert reach == pytest.approx(float(bound["reach"][k]), rel=2e-3)
    assert float(bound["between_grid_worst"]) == pytest.approx(1.0, abs=1e-9)
    assert 0.0 < float(bound["between_grid_tolerance"]) < 1e-6


def test_who_counts_and_why_not(bound: xr.Dataset) -> None:
    used = bound["response_used"].values
    assert list(np.flatnonzero(~used)) == [3, 10, 11]
    reasons = bound["exclusion_reason"].values
    assert reasons[3] == "unit U01: damaged"
    assert reasons[10].startswith("no-modes")
    assert reasons[11] == "2 unstable poles, the nominal has 0"
    assert bound["unstable_poles"].values[11] == 2
    assert int(bound["nominal_unstable_poles"]) == 0
    assert np.isnan(bound["reach"].values[~used]).all()
    assert bound["unit"].values[3] == "U01"
    assert (bound.attrs["held"], bound.attrs["of"]) == (9, 12)


def test_a_delay_too_long_to_bound_is_told_by_the_name_of_the_response() -> None:
    late = replace(plant(), delay=1e-3)
    modes = modes_dataset([plant(), late])
    names = modes["response"].values.astype(str)
    nominal = choose_nominal(modes, population_dataset(plant()), lines=LINES)
    with pytest.raises(InputError, match=f"^{names[1]}: found a delay of"):
        bound_spread(modes, nominal, order=2)


def test_extra_mode_sets_the_bound_where_it_stands(bound: xr.Dataset) -> None:
    at = int(np.argmin(np.abs(bound["frequency"].values - 15e3)))
    assert bound["radius_setter"].values[at] == "r09"


def test_intervals_tile_the_band_and_name_who_sets_it(bound: xr.Dataset) -> None:
    low, high = bound["interval_low"].values, bound["interval_high"].values
    assert low[0] == 50.0
    assert high[-1] == pytest.approx(22e3)
    np.testing.assert_array_equal(low[1:], high[:-1])
    setter = bound["radius_setter"].values
    for k, name in enumerate(bound["interval_response"].values):
        inside = (bound["frequency"] >= low[k]) & (bound["frequency"] <= high[k])
        assert set(setter[inside.values]) == {name}
        assert low[k] <= float(bound["interval_frequency"][k]) <= high[k]
    assert float(bound["interval_reach"].max()) == pytest.approx(1.0, abs=1e-3)


def test_weight_magnitude_poles_and_matrices_agree(bound: xr.Dataset) -> None:
    weight = StateSpace(*[bound[f"weight_{letter}"].values for letter in "ABCD"])
    grid = bound["frequency"].values
    found = np.abs(frequency_response(weight, grid)[:, 0, 0])
    np.testing.assert_allclose(found, bound["weight_magnitude"].values, rtol=1e-7)
    assert bound["weight_pole"].values.real.max() < 0.0
    assert bound["weight_zero"].values.real.max() < 0.0
    allowed = bound["required_radius"] * bound["allowed_excess"]
    excess = 20.0 * np.log10(np.max(bound["weight_magnitude"].values / allowed.values))
    assert excess == pytest.approx(float(bound["excess_db"]), abs=1e-6)


def test_survives_its_file(bound: xr.Dataset, tmp_path: Path) -> None:
    save(bound, tmp_path / "bound.nc")
    again = load(tmp_path / "bound.nc")
    assert isinstance(again, xr.Dataset)
    xr.testing.assert_equal(again, bound)


def test_threads_change_nothing(modes: xr.Dataset, nominal: xr.Dataset, bound: xr.Dataset) -> None:
    again = bound_spread(modes, nominal, order=4, left_out=LEFT_OUT, jobs=3)
    xr.testing.assert_identical(again, bound)


def test_other_forms_and_empty_sets_are_refused(modes: xr.Dataset, nominal: xr.Dataset) -> None:
    with pytest.raises(InputError, match="parametric"):
        bound_spread(modes, nominal, form="parametric")
    everyone = {str(name): "" for name in modes["response"].values[:11]}
    with pytest.raises(InputError, match="no plant left"):
        bound_spread(modes, nominal, left_out=everyone)
