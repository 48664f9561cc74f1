"""Tables of how responses came from time records, and what the records were marked for."""

from identkit.figures.labels import condition_of, natural_key, units_of
from identkit.figures.style import frequency_label
from identkit.grids import datasets
from identkit.report.contents import ReportInput
from identkit.report.numbers import listed
from identkit.report.table import Table, table_of
from identkit.stages.record_screening import mark_words
from identkit.stages.second_opinion import disagreements


def estimates_table(given: ReportInput) -> Table | None:
    """Return how many responses were estimated how, and why so; None without records."""
    counted: dict[tuple[str, ...], int] = {}
    for part in datasets(given.responses):
        if "estimator" not in part:
            return None
        names = ("estimator", "estimator_reason", "hold_treatment")
        for row in zip(*(part[name].values.astype(str) for name in names), strict=True):
            counted[row] = counted.get(row, 0) + 1
    rows = [(str(count), *row) for row, count in counted.items()]
    columns = (
        ("responses", "number"),
        ("method", "text"),
        ("because", "text"),
        ("hold of the drive", "text"),
    )
    return table_of("Estimated from time records", columns, rows)


def record_marks_table(given: ReportInput) -> Table | None:
    """Return what records were marked for, by unit, with what to do; None where none was."""
    grouped: dict[tuple[str, str, str], list[tuple[str, str]]] = {}
    for part in datasets(given.responses):
        units, names = units_of(part), condition_of(part)
        for at, check, said, advice in mark_words(part):
            grouped.setdefault((str(units[at]), check, advice), []).append((str(names[at]), said))
    rows = [
        (
            key[0],
            key[1],
            str(len(found)),
            found[0][1],
            key[2],
            listed([n for n, _ in found if n], 3),
        )
        for key, found in sorted(grouped.items(), key=lambda item: natural_key(item[0][0]))
    ]
    columns = (
        ("unit", "text"),
        ("mark", "text"),
        ("records", "number"),
        ("the first of them", "text"),
        ("what to try", "text"),
        ("which", "text"),
    )
    note = "Marked only: nothing is left out of the bound for these."
    return table_of("Records that deserve a look", columns, rows, note)


def second_opinion_table(given: ReportInput) -> Table | None:
    """Return the modes that subspace identification of the records contradicts; None if none."""
    if given.modes is None:
        return None
    rows = [
        (name, mode, frequency_label(fitted), frequency_label(other))
        for name, mode, fitted, other in disagreements(given.responses, given.modes)
    ]
    columns = (
        ("response", "text"),
        ("mode", "text"),
        ("fitted", "number"),
        ("from the record itself", "number"),
    )
    note = (
        "Subspace identification of the time records, with no frequency-domain step, has its "
        "nearest mode farther off than both errors and half the bandwidth of the resonance."
    )
    return table_of("Modes on which the second opinion differs", columns, rows, note)
