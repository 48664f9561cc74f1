"""Names, groups and order of responses."""

import numpy as np
import xarray as xr

from identkit.figures import labels


def campaign(**coords):
    count = len(next(iter(coords.values())))
    return xr.Dataset(
        coords={
            "response": [f"r{k}" for k in range(count)],
            **{name: ("response", np.array(values)) for name, values in coords.items()},
        }
    )


def test_numbers_in_names_sort_as_numbers():
    assert sorted(["U10", "U2", "U1b", "U1"], key=labels.natural_key) == ["U1", "U1b", "U2", "U10"]


def test_short_name_carries_what_is_known():
    data = campaign(unit=["U05", "U05"], head=["2", ""], temperature=[50.0, np.nan])
    assert labels.short_names(data).tolist() == ["U05, head 2, 50 °C", "U05"]


def test_response_id_stands_in_where_no_unit_is_named():
    data = campaign(temperature=[10.0, 20.0])
    assert labels.short_names(data).tolist() == ["r0", "r1"]
    assert labels.units_of(data).tolist() == ["r0", "r1"]


def test_groups_take_the_first_label_with_a_few_values():
    data = campaign(lot=["A"] * 12, head=["1", "2"] * 6, unit=[f"U{k}" for k in range(12)])
    groups = labels.groups_of(data, "lot", "unit", "head")
    assert groups.name == "head"
    assert groups.values == ("1", "2")
    assert groups.member.tolist() == [0, 1] * 6


def test_one_group_where_no_label_fits():
    groups = labels.groups_of(campaign(lot=["A", "A"]), "lot", "head")
    assert groups.values == ("all responses",)
    assert groups.member.tolist() == [0, 0]


def test_reading_order_is_unit_head_temperature():
    data = campaign(
        unit=["U10", "U2", "U2", "U2"], head=["1", "2", "1", "1"], temperature=[9.0, 9.0, 50.0, 5.0]
    )
    assert labels.reading_order(data).tolist() == [3, 2, 1, 0]


def test_nearest_mode_is_named_only_when_near():
    modes = np.array([1000.0, 4000.0])
    assert labels.nearest_mode(3800.0, ["M1", "M2"], modes) == "M2"
    assert labels.nearest_mode(2000.0, ["M1", "M2"], modes) == ""
    assert labels.nearest_mode(0.0, ["M1", "M2"], modes) == ""
    assert labels.nearest_mode(100.0, [], np.zeros(0)) == ""
