from dataclasses import replace

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.grids import load, save
from identkit.methods.enclosing_disc import enclosing_disc
from identkit.methods.modal_model import modal_response
from identkit.methods.state_space import StateSpace, frequency_response
from identkit.stages.nominal import choose_nominal, measured_lines, nominal_plant
from tests.methods.families import family, plant
from tests.stages.invented_modes import modes_dataset, population_dataset

LINES = np.geomspace(50.0, 22e3, 200)
PLANTS = family(10, 5)


def chosen(**options: object) -> xr.Dataset:
    return choose_nominal(
        modes_dataset(PLANTS), population_dataset(plant()), lines=LINES, **options
    )  # type: ignore[arg-type]


def test_matrices_are_the_population_centre_with_its_delay_inside() -> None:
    data = chosen()
    system = StateSpace(*[data[f"nominal_{letter}"].values for letter in "ABCD"])
    found = frequency_response(system, LINES)[:, 0, 0]
    centre = modal_response(LINES, plant())
    np.testing.assert_allclose(found, centre, atol=1.2e-3 * np.abs(centre).max())
    np.testing.assert_allclose(np.abs(found / centre - 1.0), 0.0, atol=1e-3)
    np.testing.assert_allclose(found, nominal_plant(data).response(LINES), rtol=1e-8)


def test_radius_and_floor_over_the_grid() -> None:
    data = chosen()
    grid = data["frequency"].values
    responses = np.array([modal_response(grid, one) for one in PLANTS])
    radius = np.abs(responses / nominal_plant(data).response(grid) - 1.0).max(axis=0)
    np.testing.assert_allclose(data["nominal_radius"].values, radius, rtol=1e-9)
    floor = enclosing_disc(responses)
    np.testing.assert_allclose(data["radius_floor"].values, floor.radius, rtol=1e-9)
    assert np.all(data["radius_floor"].values <= radius * (1.0 + 1e-9))
    assert float(data["floor_distance_peak_db"]) >= float(data["floor_distance_mean_db"]) >= 0.0


def test_grid_keeps_the_lines_and_resolves_every_mode() -> None:
    grid = chosen()["frequency"].values
    assert np.isin(LINES[1:-1], grid).all()
    assert grid[0] == 50.0
    assert grid[-1] == pytest.approx(22e3)
    for one in PLANTS:
        for frequency, damping in zip(one.modal_frequency, one.damping_ratio, strict=True):
            near = np.searchsorted(grid, frequency)
            assert grid[near] - grid[near - 1] <= 0.5 * damping * frequency


def test_left_out_and_unfitted_responses_do_not_count() -> None:
    far = replace(plant(), residue=3.0 * plant().residue)
    modes = modes_dataset([*PLANTS, far, far])
    modes["fit_outcome"][10] = 5
    fewer = choose_nominal(
        modes, population_dataset(plant()), lines=LINES, left_out={"r11": "damaged"}
    )
    np.testing.assert_allclose(fewer["nominal_radius"], chosen()["nominal_radius"], rtol=1e-12)
    with pytest.raises(InputError, match="every response left out"):
        chosen(left_out={f"r{k:02d}": "" for k in range(10)})


def test_survives_its_file(tmp_path: object) -> None:
    data = chosen(band=(100.0, 20e3))
    save(data, f"{tmp_path}/nominal.nc")
    again = load(f"{tmp_path}/nominal.nc")
    assert isinstance(again, xr.Dataset)
    np.testing.assert_array_equal(again["frequency"].values, data["frequency"].values)
    np.testing.assert_allclose(again.attrs["band"], [100.0, 20e3])
    assert nominal_plant(again).delay_order == nominal_plant(data).delay_order


def test_refusals_say_what_is_wrong() -> None:
    with pytest.raises(InputError, match="found .middle.; expected centre or tightest"):
        chosen(choice="middle")
    with pytest.raises(InputError, match="no band and no measured lines"):
        choose_nominal(modes_dataset(PLANTS), population_dataset(plant()))
    broken = population_dataset(plant())
    broken["delay"] = np.nan
    with pytest.raises(InputError, match="delay: found a missing value"):
        choose_nominal(modes_dataset(PLANTS), broken, lines=LINES)
    late = population_dataset(replace(plant(), delay=1e-2))
    with pytest.raises(InputError, match="rad at the band's edge"):
        choose_nominal(modes_dataset(PLANTS), late, lines=LINES)


def test_measured_lines_of_several_grids() -> None:
    one = xr.Dataset(coords={"frequency": [1.0, 2.0]})
    two = xr.Dataset(coords={"frequency": [2.0, 3.0]})
    tree = xr.DataTree.from_dict({"/grid_1": one, "/grid_2": two})
    np.testing.assert_array_equal(measured_lines(tree), [1.0, 2.0, 3.0])


def test_tightest_is_no_worse_than_the_centre_and_prints_both() -> None:
    centre, tight = chosen(), chosen(choice="tightest")
    for measure in ("peak", "mean"):
        own = float(centre[f"floor_distance_{measure}_db"])
        assert float(centre[f"centre_distance_{measure}_db"]) == own
        assert float(tight[f"centre_distance_{measure}_db"]) == pytest.approx(own, abs=0.05)
    assert float(tight["floor_distance_mean_db"]) < float(centre["floor_distance_mean_db"])
    system = StateSpace(*[tight[f"nominal_{letter}"].values for letter in "ABCD"])
    assert system.unstable_poles() == 0
    found = frequency_response(system, LINES)[:, 0, 0]
    np.testing.assert_allclose(found, nominal_plant(tight).response(LINES), rtol=1e-7)
