"""Tables of records in the report."""

from dataclasses import replace

import numpy as np

from identkit.report.record_tables import (
    estimates_table,
    record_marks_table,
    second_opinion_table,
)
from identkit.stages.record_screening import CHECKS


def with_records(given):
    count = given.responses.sizes["response"]
    value = np.zeros((count, len(CHECKS)))
    value[2, 1] = 0.25
    dims = ("response", "record_check")
    responses = given.responses.assign(
        estimator=("response", ["multisine"] * (count - 1) + ["joint"]),
        estimator_reason=("response", ["it repeats"] * (count - 1) + ["it does not"]),
        hold_treatment=("response", ["divided"] * count),
        record_mark=(dims, value > 0.0),
        record_value=(dims, value),
        record_limit=(dims, np.zeros(value.shape)),
    ).assign_coords(record_check=[check.name for check in CHECKS])
    return replace(given, responses=responses)


def test_methods_are_counted_with_their_reasons(given):
    count = given.responses.sizes["response"]
    table = estimates_table(with_records(given))
    assert table.rows[0] == (str(count - 1), "multisine", "it repeats", "divided")
    assert table.rows[1] == ("1", "joint", "it does not", "divided")


def test_marks_say_what_happened_and_what_to_try(given):
    table = record_marks_table(with_records(given))
    assert len(table.rows) == 1
    assert table.rows[0][1:3] == ("excursions", "1")
    assert table.rows[0][3].startswith("25.00% of the samples lie beyond the linear range")
    assert "excite less" in table.rows[0][4]


def test_without_records_there_are_no_such_tables(given):
    assert estimates_table(given) is None
    assert record_marks_table(given) is None
    assert second_opinion_table(given) is None


def test_a_mode_the_record_contradicts_is_listed(given):
    modes = given.modes
    frequency = modes["modal_frequency"].values.copy()
    for row in frequency:
        row[~np.isfinite(row)] = 1.0
    frequency[3, 1] *= 1.07
    damping = np.full(frequency.shape, 0.01)
    dims = ("response", "subspace_mode")
    responses = given.responses.assign(
        subspace_frequency=(dims, frequency),
        subspace_damping_ratio=(dims, damping),
        subspace_frequency_error=(dims, np.full(frequency.shape, 0.1)),
    )
    table = second_opinion_table(replace(given, responses=responses))
    assert [row[:2] for row in table.rows] == [
        (str(modes["response"].values[3]), str(modes["mode"].values[1]))
    ]
