"""A table of the report: plain text cells, escaped only where they are shown."""

from collections.abc import Sequence
from dataclasses import dataclass

MOST_ROWS = 40


@dataclass(frozen=True)
class Table:
    """One table of a page.

    Attributes
    ----------
    title
        What it lists.
    columns
        Heads, each with "text" or "number" for its alignment.
    rows
        Cells as text.
    note
        Where the figures come from; "" where nothing needs saying.
    hidden
        Number of rows left out for want of room.
    """

    title: str
    columns: tuple[tuple[str, str], ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""
    hidden: int = 0


def table_of(
    title: str,
    columns: Sequence[tuple[str, str]],
    rows: Sequence[Sequence[str]],
    note: str = "",
    most: int = MOST_ROWS,
) -> Table | None:
    """Return a table of at most `most` rows, or None where there is nothing to list."""
    if not rows:
        return None
    shown = tuple(tuple(row) for row in rows[:most])
    return Table(title, tuple(columns), shown, note, max(0, len(rows) - most))
