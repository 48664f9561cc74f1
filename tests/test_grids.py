import h5py
import numpy as np
import pytest
import xarray as xr

from identkit import grids
from identkit.errors import InputError


def invented(responses=3, points=5):
    values = np.arange(responses * points).reshape(responses, 1, 1, points)
    dims = ("response", "output", "input", "frequency")
    return xr.Dataset(
        {
            "frequency_response": (dims, values * (1 - 2j)),
            "usable_mask": (dims, values % 2 == 0),
            "remark": ("response", ["ä"] * responses),
        },
        coords={
            "response": [f"U{k}/é" for k in range(responses)],
            "unit": ("response", ["U1", "", *["U3"] * (responses - 2)]),
            "temperature": ("response", np.r_[np.nan, np.full(responses - 1, 25.0)]),
            "output": ["output"],
            "input": ["input"],
            "frequency": np.arange(1.0, points + 1),
        },
        attrs={"band": [50.0, 22000.0], "input_unit": "", "count": 3, "skipped_files": "[]"},
    )


def test_one_grid_comes_back_as_it_went(tmp_path):
    data = invented()
    grids.save(data, tmp_path / "a.nc")
    back = grids.load(tmp_path / "a.nc")
    xr.testing.assert_identical(back, data)
    assert back["unit"].dtype.kind == "U"
    assert back.attrs == data.attrs


def test_several_grids_come_back_in_order_and_unpadded(tmp_path):
    parts = [invented(2, 3 + k) for k in range(11)]
    grids.save(grids.gather(parts), tmp_path / "a.nc")
    back = grids.datasets(grids.load(tmp_path / "a.nc"))
    assert [part.sizes["frequency"] for part in back] == [3 + k for k in range(11)]
    for part, original in zip(back, parts, strict=True):
        xr.testing.assert_identical(part, original)


def test_groups_carry_the_names_of_the_contract(tmp_path):
    grids.save(grids.gather([invented(2, 3), invented(2, 4)]), tmp_path / "a.nc")
    with h5py.File(tmp_path / "a.nc") as file:
        assert sorted(file) == ["grid_1", "grid_2"]


def test_complex_numbers_are_the_compound_of_r_and_i(tmp_path):
    grids.save(invented(), tmp_path / "a.nc")
    with h5py.File(tmp_path / "a.nc") as file:
        kind = file["frequency_response"].id.get_type()
        members = [kind.get_member_name(k) for k in range(kind.get_nmembers())]
    assert members == [b"r", b"i"]


def test_gather_of_one_is_that_one_and_of_none_is_refused():
    data = invented()
    assert grids.gather([data]) is data
    with pytest.raises(ValueError, match="0 datasets"):
        grids.gather([])


def test_saving_leaves_no_other_file(tmp_path):
    grids.save(invented(), tmp_path / "a.nc")
    grids.save(invented(4), tmp_path / "a.nc")
    assert [path.name for path in tmp_path.iterdir()] == ["a.nc"]
    assert grids.load(tmp_path / "a.nc").sizes["response"] == 4


@pytest.mark.parametrize("share", [0.0, 0.001, 0.1, 0.5, 0.99])
def test_a_file_cut_short_is_one_sentence(tmp_path, share):
    grids.save(invented(50, 200), tmp_path / "a.nc")
    data = (tmp_path / "a.nc").read_bytes()
    (tmp_path / "b.nc").write_bytes(data[: int(share * len(data))])
    with pytest.raises(InputError) as caught:
        grids.load(tmp_path / "b.nc")
    assert "b.nc: found a" in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("make", "found"),
    [
        (lambda path: None, "no such file"),
        (lambda path: path.mkdir(), "a folder"),
        (lambda path: path.write_text("a,b\n" * 300), "of another kind"),
    ],
)
def test_what_is_no_file_of_ours_is_one_sentence(tmp_path, make, found):
    make(tmp_path / "x.nc")
    with pytest.raises(InputError, match=found):
        grids.load(tmp_path / "x.nc")


def test_label_mask_by_text_number_and_name():
    data = invented(4)
    assert grids.label_mask(data, {"unit": "U3"}).tolist() == [False, False, True, True]
    both = grids.label_mask(data, {"unit": "", "temperature": 25})
    assert both.tolist() == [False, True, False, False]
    assert grids.label_mask(data, {"response": "U2/é"}).tolist() == [False, False, True, False]


@pytest.mark.parametrize(
    ("labels", "found"), [({"lot": "A"}, '"lot"'), ({"temperature": "hot"}, '"hot"')]
)
def test_label_mask_refuses_what_cannot_be(labels, found):
    with pytest.raises(InputError, match=found):
        grids.label_mask(invented(), labels)
