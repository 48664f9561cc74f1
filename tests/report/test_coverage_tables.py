"""Tables of the statements on the next unit."""

from dataclasses import replace

from identkit.methods.beta_binomial import BetaShares
from identkit.report.coverage_tables import (
    coverage_checks_table,
    coverage_table,
    unit_cost_table,
)
from identkit.report.page import render
from identkit.report.verdict import short_verdict
from identkit.stages.coverage import state_coverage
from identkit.stages.leave_one_out import LeaveOneOut
from identkit.stages.model_coverage import Check, ModelStatement

TRIED = LeaveOneOut({"U01": 0.5, "U02": 0.9, "U03": 1.4}, 3, True)


def stated(passed=True, **options):
    check = Check("unit effects are normal", passed, "chance <0.5>")
    model = ModelStatement(BetaShares(90.0, 10.0), 16, 2400, 12, (check,))
    return state_coverage(left_out=TRIED, model=model, **options)


def test_every_statement_has_its_row_and_basis(given):
    table = coverage_table(replace(given, coverage=stated(largest_reach={"U9": 0.9})))
    assert [row[0] for row in table.rows] == [
        "units held out",
        "leaving each unit out",
        "population model",
    ]
    assert [row[4] for row in table.rows] == ["yes", "approximate", "yes"]
    assert table.rows[1][1] == "66.7 %"
    assert all(row[5] and row[6] for row in table.rows)


def test_a_failed_check_is_shown_where_the_statement_stands(given):
    broken = replace(given, coverage=stated(passed=False))
    assert coverage_table(broken).rows[-1][4] == "no: a check failed"
    assert coverage_checks_table(broken).rows == (
        ("unit effects are normal", "failed", "chance <0.5>"),
    )


def test_the_dearest_unit_comes_first(given):
    tried = replace(TRIED, relief_db={"U01": 0.1, "U02": -0.02, "U03": 1.25})
    table = unit_cost_table(replace(given, coverage=state_coverage(left_out=tried)))
    assert table.rows == (
        ("U03", "1.25 dB", "1.40"),
        ("U01", "0.10 dB", "0.500"),
        ("U02", "−0.02 dB", "0.900"),
    )


def test_nothing_stated_makes_no_table(given):
    assert coverage_table(given) is None
    assert unit_cost_table(given) is None
    assert coverage_checks_table(given) is None


def test_page_and_verdict_say_it_escaped(given):
    said = replace(given, coverage=stated())
    page = render(said, {})
    assert 'id="next-unit"' in page
    assert "chance &lt;0.5&gt;" in page
    assert any("Leaving each unit out in turn, 2 of 3" in line for line in short_verdict(said))
