import h5py
import numpy as np
import pytest
import xarray as xr

from identkit import grids
from identkit.errors import InputError
from identkit.readers.campaign import read_responses

POINT = ("response", "output", "input", "frequency")


def invented(names=("a", "b"), points=4, **extra):
    shape = (len(names), 1, 1, points)
    rng = np.random.default_rng(3)
    values = rng.normal(size=shape) + 1j * rng.normal(size=shape)
    return xr.Dataset(
        {"frequency_response": (POINT, values), **extra},
        coords={
            "response": list(names),
            "unit": ("response", [f"U{k}" for k in range(len(names))]),
            "temperature": ("response", [25.0, np.nan, 5.0][: len(names)]),
            "output": ["output"],
            "input": ["input"],
            "frequency": 100.0 * np.arange(1, points + 1),
        },
        attrs={"input_unit": "A", "output_unit": "um", "sample_period": 0.0},
    )


def test_a_file_of_ours_comes_back_as_it_was(tmp_path):
    data = invented(frequency_response_variance=(POINT, np.full((2, 1, 1, 4), 0.1)))
    grids.save(data, tmp_path / "r.nc")
    back = read_responses("r.nc", folder=tmp_path)
    for name in data.variables:
        xr.testing.assert_equal(back[name].drop_vars("source", errors="ignore"), data[name])
    assert back["source"].values.tolist() == ["r.nc", "r.nc"]
    assert back.attrs["input_unit"] == "A"
    assert back.attrs["variance_source"] == "measured"


@pytest.mark.parametrize("word", ["coherence", "residuals", "measured"])
def test_a_file_that_says_where_its_variance_is_from_keeps_its_word(tmp_path, word):
    data = invented(
        frequency_response_variance=(POINT, np.full((2, 1, 1, 4), 0.1)),
        coherence=(POINT, np.full((2, 1, 1, 4), 0.9)),
    )
    grids.save(data.assign_attrs(variance_source=word), tmp_path / "r.nc")
    assert read_responses("r.nc", folder=tmp_path).attrs["variance_source"] == word


def test_several_grids_stay_several(tmp_path):
    tree = grids.gather([invented(("a", "b"), 4), invented(("c",), 6)])
    grids.save(tree, tmp_path / "r.nc")
    parts = grids.datasets(read_responses("r.nc", folder=tmp_path))
    assert [part["response"].values.tolist() for part in parts] == [["a", "b"], ["c"]]
    assert [part.sizes["frequency"] for part in parts] == [4, 6]


def test_labels_of_the_path_go_before_labels_inside(tmp_path):
    grids.save(invented(), tmp_path / "X_7C.nc")
    grids.save(invented(), tmp_path / "Y_8C.nc")
    back = read_responses("{unit}_{temperature:g}C.nc", folder=tmp_path)
    assert back["response"].values.tolist() == ["X_7C/a", "X_7C/b", "Y_8C/a", "Y_8C/b"]
    assert back["unit"].values.tolist() == ["X", "X", "Y", "Y"]
    assert back["temperature"].values.tolist() == [7, 7, 8, 8]


def test_coherence_and_averages_of_the_file_give_the_variance(tmp_path):
    data = invented(
        coherence=(POINT, np.full((2, 1, 1, 4), 0.5)), averages=("response", np.array([3, 5]))
    )
    grids.save(data, tmp_path / "r.nc")
    back = read_responses("r.nc", folder=tmp_path)
    square = np.abs(data["frequency_response"].values) ** 2
    np.testing.assert_allclose(
        back["frequency_response_variance"].values, square / np.array([2, 4])[:, None, None, None]
    )


def test_missing_points_stay_missing_and_marks_stay(tmp_path):
    data = invented(usable_mask=(POINT, np.arange(8).reshape(2, 1, 1, 4) != 5))
    data["frequency_response"][0, 0, 0, 2] = np.nan
    grids.save(data, tmp_path / "r.nc")
    back = read_responses("r.nc", folder=tmp_path)
    xr.testing.assert_equal(back["usable_mask"].drop_vars("source"), data["usable_mask"])
    assert np.flatnonzero(np.isnan(back["frequency_response"].values)).tolist() == [2]


def test_dimensions_in_another_order_and_frequency_in_khz_are_understood(tmp_path):
    data = invented()
    turned = data.transpose("frequency", "input", "output", "response")
    turned = turned.assign_coords(frequency=turned["frequency"] / 1000)
    turned["frequency"].attrs["units"] = "kHz"
    grids.save(turned, tmp_path / "r.nc")
    back = read_responses("r.nc", folder=tmp_path)
    np.testing.assert_allclose(back["frequency"].values, data["frequency"].values)
    np.testing.assert_array_equal(
        back["frequency_response"].values, data["frequency_response"].values
    )


def test_one_response_without_the_small_dimensions(tmp_path):
    data = invented().isel(response=0, output=0, input=0, drop=True)
    grids.save(data, tmp_path / "U9.nc")
    grids.save(data, tmp_path / "U10.nc")
    back = read_responses("{unit}.nc", folder=tmp_path)
    assert back["response"].values.tolist() == ["U9", "U10"]
    assert back["frequency_response"].shape == (2, 1, 1, 4)


def test_plain_hdf5_without_named_dimensions(tmp_path):
    data = invented()
    with h5py.File(tmp_path / "r.h5", "w") as file:
        file["frequency_response"] = data["frequency_response"].values
        file["frequency"] = data["frequency"].values
        file["response"] = ["a", "b"]
        file["unit"] = ["U0", "U1"]
    back = read_responses("r.h5", folder=tmp_path)
    assert back["response"].values.tolist() == ["a", "b"]
    assert back["unit"].values.tolist() == ["U0", "U1"]
    np.testing.assert_array_equal(
        back["frequency_response"].values, data["frequency_response"].values
    )


def test_plain_hdf5_of_another_shape_is_refused(tmp_path):
    with h5py.File(tmp_path / "r.h5", "w") as file:
        file["frequency_response"] = np.ones((2, 3), complex)
        file["frequency"] = np.arange(1.0, 4.0)
    with pytest.raises(InputError, match="without names of its 2 dimensions; expected the dim"):
        read_responses("r.h5", folder=tmp_path)


@pytest.mark.parametrize(
    ("change", "options", "sentence"),
    [
        (lambda d: d.drop_vars("frequency"), {}, "expected also the variable frequency"),
        (
            lambda d: d.rename(frequency_response="h"),
            {},
            "expected also the variable frequency_response",
        ),
        (lambda d: d.rename(frequency="f"), {}, "expected also the variable frequency"),
        (
            lambda d: d.assign_coords(frequency=d["frequency"].assign_attrs(units="furlong")),
            {},
            'found frequency in "furlong"; expected one of Hz',
        ),
        (
            lambda d: d.drop_vars("frequency").assign(frequency=("response", [1.0, 2.0])),
            {},
            "found frequency_response along ('response', 'output', 'input', 'frequency')",
        ),
        (lambda d: d.map(np.real), {}, "frequency_response of type float64; expected complex"),
        (
            lambda d: xr.concat([d, d.assign_coords(output=["z"])], "output"),
            {},
            "found 2 channels along output",
        ),
        (lambda d: d.isel(frequency=[0, 2, 1, 3]), {}, "response a, point 3: found the freq"),
        (lambda d: d.isel(frequency=[0]), {}, "response a: found 1 point above 0 Hz"),
        (lambda d: d * 0, {}, "response a, point 1: found the response 0"),
        (lambda d: d.assign_attrs(sample_period=1e-4), {}, "sample_period: found 0.0001"),
        (
            lambda d: d,
            {"units": {"output": "nm"}},
            "r.nc, output_unit: found um; expected nm, as the study says",
        ),
    ],
)
def test_what_breaks_the_layout_is_one_sentence(tmp_path, change, options, sentence):
    with xr.set_options(keep_attrs=True):
        grids.save(change(invented()), tmp_path / "r.nc")
    with pytest.raises(InputError) as caught:
        read_responses("r.nc", folder=tmp_path, **options)
    assert len(caught.value.problems) == 1
    assert str(caught.value).startswith("r.nc")
    assert sentence in str(caught.value)


@pytest.mark.parametrize("share", [0.0, 0.2, 0.7])
def test_a_file_cut_short_is_named(tmp_path, share):
    grids.save(invented(), tmp_path / "r.nc")
    data = (tmp_path / "r.nc").read_bytes()
    (tmp_path / "r.nc").write_bytes(data[: int(share * len(data))])
    with pytest.raises(InputError, match="^r.nc: found a.*readable NetCDF-4/HDF5 file"):
        read_responses("r.nc", folder=tmp_path)


def test_files_that_disagree_about_units_are_refused(tmp_path):
    grids.save(invented(), tmp_path / "1.nc")
    grids.save(invented().assign_attrs(input_unit="V"), tmp_path / "2.nc")
    with pytest.raises(InputError, match="input_unit of the files: found A and V"):
        read_responses("{unit}.nc", folder=tmp_path)
