"""Tables of what screening marked, what was left out and what was skipped."""

import numpy as np

from identkit.figures.labels import condition_of, natural_key, units_of
from identkit.grids import datasets
from identkit.report.contents import ReportInput
from identkit.report.numbers import listed, number
from identkit.report.table import Table, table_of
from identkit.report.verdict import excluded_names, skipped_files


def marks_table(given: ReportInput) -> Table | None:
    """Return what screening marked, by unit and mark, and what became of it."""
    if given.screening is None:
        return None
    out = excluded_names(given.plant_set)
    grouped: dict[tuple[str, str, str], list[tuple[str, float, float]]] = {}
    for part in datasets(given.screening):
        units, ids = units_of(part), part["response"].values.astype(str)
        names = condition_of(part)
        for at, kind in zip(*np.nonzero(part["response_mark"].values), strict=True):
            fate = "left out" if ids[at] in out else "kept"
            key = (str(units[at]), str(part["mark"].values[kind]), fate)
            value = float(part["response_mark_value"].values[at, kind])
            limit = float(part["response_mark_limit"].values[at, kind])
            grouped.setdefault(key, []).append((str(names[at]), value, limit))
    rows = [_mark_row(key, grouped[key]) for key in sorted(grouped, key=_by_unit)]
    columns = (
        ("unit", "text"),
        ("mark", "text"),
        ("responses", "number"),
        ("value", "number"),
        ("limit", "number"),
        ("in the bound", "text"),
        ("which", "text"),
    )
    note = (
        "noise: median relative standard deviation; outlier: distance from peers in robust "
        "standard deviations; too-few-points: usable points."
    )
    return table_of("Marked by screening", columns, rows, note)


def _by_unit(key: tuple[str, str, str]) -> tuple[list[tuple[int, str]], str, str]:
    return natural_key(key[0]), key[1], key[2]


def _mark_row(key: tuple[str, str, str], marked: list[tuple[str, float, float]]) -> tuple[str, ...]:
    values = [value for _, value, _ in marked]
    span = " to ".join(dict.fromkeys((number(min(values)), number(max(values)))))
    which = listed([name for name, _, _ in marked if name], 3)
    return (key[0], key[1], str(len(marked)), span, number(marked[0][2]), key[2], which)


def skipped_table(given: ReportInput) -> Table | None:
    """Return the files that were skipped, with the reason."""
    return table_of("Files skipped", (("file", "text"), ("reason", "text")), skipped_files(given))


def excluded_table(given: ReportInput) -> Table | None:
    """Return the responses left out of the bound, one row per unit and reason."""
    owners: dict[str, str] = {}
    for part in datasets(given.responses):
        names = part["response"].values.astype(str).tolist()
        owners.update(zip(names, units_of(part).tolist(), strict=True))
    grouped: dict[tuple[str, str], list[str]] = {}
    for name, reason in excluded_names(given.plant_set).items():
        grouped.setdefault((owners.get(name, ""), reason), []).append(name)
    rows = [
        (unit, str(len(grouped[unit, reason])), reason, listed(grouped[unit, reason], 2))
        for unit, reason in sorted(grouped, key=lambda key: natural_key(key[0]))
    ]
    columns = (
        ("unit", "text"),
        ("responses", "number"),
        ("reason", "text"),
        ("which", "text"),
    )
    return table_of("Left out of the bound", columns, rows)
