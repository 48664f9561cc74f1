"""Tables of what is said of the next unit: every statement with its basis, every check."""

from collections.abc import Mapping
from typing import Any

from identkit.report.contents import ReportInput
from identkit.report.numbers import number, percent
from identkit.report.table import Table, table_of

_STATEMENTS = {
    "exact": "units held out",
    "leave_one_out": "leaving each unit out",
    "model_based": "population model",
}


def coverage_table(given: ReportInput) -> Table | None:
    """Return every statement on the next unit with its basis."""
    rows = [
        _row(name, given.coverage[key])
        for key, name in _STATEMENTS.items()
        if given.coverage.get(key)
    ]
    columns = (
        ("statement", "text"),
        ("share held", "number"),
        ("confidence", "number"),
        ("units", "number"),
        ("stands", "text"),
        ("method", "text"),
        ("assumes", "text"),
    )
    note = (
        "With a confidence, the share is at least this; without one it is an estimate. Only a "
        "statement that stands goes into the set file. No figure here is a safety certificate."
    )
    return table_of("What is said of the next unit", columns, rows, note)


def coverage_checks_table(given: ReportInput) -> Table | None:
    """Return the assumptions of the population model, each tested on the measurements."""
    stated = given.coverage.get("model_based") or {}
    rows = [
        (str(check["assumption"]), "passed" if check["passed"] else "failed", str(check["finding"]))
        for check in stated.get("checks", ())
    ]
    columns = (("assumption", "text"), ("check", "text"), ("finding", "text"))
    note = (
        "A check that passes is no proof: few units hide much. Sound assumptions fail one of the "
        "tests in 5 % of campaigns."
    )
    return table_of("What the population model assumes", columns, rows, note)


def unit_cost_table(given: ReportInput) -> Table | None:
    """Return the units without which the set would be tighter, the dearest first."""
    tried = given.coverage.get("leave_one_out") or {}
    relief: dict[str, float] = tried.get("relief_db") or {}
    rows = [
        (unit, f"{relief[unit]:.2f} dB".replace("-", "−"), number(float(tried["reach"][unit])))
        for unit in sorted(relief, key=lambda unit: -relief[unit])
    ]
    columns = (("unit", "text"), ("radius falls by", "number"), ("reach from the others", "number"))
    note = (
        "Required radius without the unit against the released one, mean over log frequency, the "
        "nominal made without it where that was refitted; above 1 the others would not hold it."
    )
    return table_of("What each unit costs", columns, rows, note, 8)


def _row(name: str, statement: Mapping[str, Any]) -> tuple[str, ...]:
    confidence = statement["confidence"]
    if confidence is None:
        stands = "approximate"
    else:
        stands = "yes" if statement.get("trusted", True) else "no: a check failed"
    return (
        name,
        percent(float(statement["content"]), 3),
        "–" if confidence is None else percent(float(confidence), 3),
        str(statement["units"]),
        stands,
        str(statement["method"]),
        "; ".join(map(str, statement["assumptions"])),
    )
