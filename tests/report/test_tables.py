"""Tables of the report."""

from dataclasses import replace

import numpy as np

from identkit.report import measurement_tables, set_tables


def test_audit_lists_what_counts_before_what_was_left_out(given):
    audit = given.audit.copy(deep=True)
    audit["verdict"] = audit["verdict"].astype("<U12")
    audit["verdict"].values[3] = "cannot tell"
    table = set_tables.audit_table(replace(given, audit=audit))
    assert [row[-1] for row in table.rows] == ["used"] + ["left out"] * 4
    assert table.rows[0][:2] == ("U01, head 1, 50 °C", "cannot tell")
    assert table.rows[-1][2] == "3.200 at 6.3 kHz"


def test_audit_counts_and_failed_claims(given):
    assert set_tables.audit_counts(given) == "Of 24 responses: 20 held and 4 not held"
    spoiled = given.audit.assign_attrs(failed_checks='["weight: found 1; expected 2"]')
    assert set_tables.failed_checks(replace(given, audit=spoiled)) == [
        "weight: found 1; expected 2"
    ]


def test_marks_are_gathered_by_unit_with_the_range_of_values(given):
    screening = given.screening.copy(deep=True)
    screening["response_mark"].values[[20, 21], 1] = True
    screening["response_mark_value"].values[[20, 21], 1] = [7.0, 9.5]
    table = measurement_tables.marks_table(replace(given, screening=screening))
    assert table.rows[0] == ("U01", "outlier", "1", "8.20", "6.00", "kept", "head 0, 50 °C")
    assert table.rows[1][:6] == ("U06", "outlier", "2", "7.00 to 9.50", "6.00", "left out")


def test_left_out_is_gathered_by_unit_and_reason(given):
    table = measurement_tables.excluded_table(given)
    assert len(table.rows) == 1
    assert table.rows[0][:3] == ("U06", "4", "unit U06: dropped on the floor")


def test_largest_reach_leaves_out_what_does_not_count(given):
    plants = tuple(
        replace(p, reach=9.0) if at == 0 else p for at, p in enumerate(given.plant_set.plants)
    )
    from identkit.plant_set.fields import Excluded

    measured = replace(
        given.plant_set.certificate.measured, excluded=(Excluded(plants[0].response, "odd"),)
    )
    certificate = replace(given.plant_set.certificate, measured=measured)
    contents = replace(given.plant_set, plants=plants, certificate=certificate)
    table = set_tables.worst_table(replace(given, plant_set=contents), (), np.zeros(0))
    assert len(table.rows) == 10
    assert all(float(row[1]) < 2.0 for row in table.rows)


def test_claims_carry_their_basis(given):
    rows = {row[0]: row for row in set_tables.claims_table(given).rows}
    assert rows["held"][1] == "20 of 20"
    assert rows["between measured frequencies"][2] == "exact norm"
    assert rows["audit"][1] == "passed"


def test_orders_need_more_than_one_trial(given):
    import xarray as xr

    bound = xr.Dataset(
        {
            "trial_order": ("trial", [6, 4]),
            "trial_excess_db": ("trial", [2.0, 5.0]),
            "trial_floor_db": ("trial", [1.99, 4.9]),
        }
    )
    table = set_tables.order_table(replace(given, bound=bound))
    assert table.rows == (
        ("4", "5.000", "4.900", "0.100", ""),
        ("6", "2.000", "1.990", "0.010", "chosen"),
    )
    assert set_tables.order_table(replace(given, bound=bound.isel(trial=[0]))) is None
