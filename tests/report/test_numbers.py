"""Numbers as a person reads them."""

import math

import pytest

from identkit.report.numbers import counted, listed, number, percent, with_interval


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (1234.5, "1234"),
        (0.012345, "0.0123"),
        (-2.5, "−2.50"),
        (7.84e7, "7.84×10⁷"),
        (1e-6, "1.00×10⁻⁶"),
        (math.nan, "–"),
        (math.inf, "∞"),
    ],
)
def test_three_significant_digits(value, text):
    assert number(value) == text


def test_value_keeps_the_decimals_its_error_warrants():
    assert with_interval(1237.84, 1.7) == "1237.8 ± 1.7"
    assert with_interval(0.021893, 0.00056) == "0.02189 ± 0.00056"
    assert with_interval(-3.2e8, 4e6) == "(−3.200 ± 0.040)×10⁸"
    assert with_interval(math.nan, 1.0) == "–"
    assert with_interval(12.0, math.nan) == "12.00"


def test_percent_counts_and_lists():
    assert percent(0.00514) == "0.51 %"
    assert percent(math.nan) == "–"
    assert counted(1, "unit") == "1 unit"
    assert counted(2, "unit") == "2 units"
    assert listed([]) == ""
    assert listed(["a"]) == "a"
    assert listed(["a", "b", "c"]) == "a, b and c"
    assert listed(["a", "b", "c", "d"], 2) == "a, b and 2 more"
