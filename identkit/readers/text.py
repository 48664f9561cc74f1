"""Measured responses from text files: a header row, then one row of numbers per frequency.

Comma, semicolon, tab or blanks between values; a decimal comma is understood wherever the comma
does not separate values; lines that start with ``#`` and lines without values are passed over. A
fast path reads good files; when it stumbles, a slow one finds the line to name.
"""

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.readers.columns import ColumnChoice, FoundColumns, find_columns
from identkit.readers.measured import MeasuredResponse, first_fault, with_variance

_EXPECTED = "a text file in UTF-8 with a header row"
_DELIMITERS = ("\t", ";", ",")
_BLANKS = re.compile(r"\s+(?![\[(])")


@dataclass(frozen=True)
class _TextTable:
    """A text file taken apart, its values not read yet."""

    place: str
    header: list[str]
    header_line: int
    delimiter: str | None
    rows: list[str]
    lines: list[int] = field(repr=False)


def read_text(
    path: Path, choices: dict[str, ColumnChoice], averages: float | None, place: str = ""
) -> MeasuredResponse:
    """Read one text file of a measured scalar response.

    Parameters
    ----------
    path
        The file.
    choices
        Names and units of the columns, from `column_choices`.
    averages
        With coherence and more than 1 average the variance follows from them
        (`coherence_variance`); a variance column goes before.
    place
        What to call the file in messages; its path by default.

    Raises
    ------
    InputError
        With one problem, naming file, line and column.
    """
    place = place or str(path)
    table = _take_apart(_decode(path, place), place)
    where = f"{table.place}, line {table.header_line}"
    columns = find_columns(table.header, choices, where)
    values = _numbers(table, columns)
    return with_variance(_measured(table, columns, values), averages)


def _decode(path: Path, place: str) -> str:
    """Return the text of a file, or say why it is none."""
    try:
        data = path.read_bytes()
    except OSError as error:
        found = f"a file that cannot be read ({error.strerror or type(error).__name__})"
        raise InputError(Problem(place, found, _EXPECTED)) from None
    found = _why_no_text(data)
    if found:
        raise InputError(Problem(place, found, _EXPECTED))
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        found = f"the wrong encoding (byte 0x{data[error.start]:02x} is not UTF-8)"
        raise InputError(Problem(f"{place}, line {line}", found, _EXPECTED)) from None


def _why_no_text(data: bytes) -> str:
    if not data.strip():
        return "an empty file"
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return "the wrong encoding (UTF-16)"
    if b"\0" in data:
        return "binary data"
    return ""


def _take_apart(text: str, place: str) -> _TextTable:
    """Split a text into its header and its rows of values."""
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    kept = [(k, line) for k, line in enumerate(lines, start=1) if line.strip(" \t,;")]
    rows = [(k, line) for k, line in kept if not line.lstrip().startswith("#")]
    if not rows:
        raise InputError(Problem(place, "only comments", _EXPECTED))
    header_line, header = rows[0]
    delimiter = _delimiter_of(header)
    if _is_numbers(_split(header, delimiter)):
        header_line, header = _commented_header(kept, rows[0], place)
        delimiter = _delimiter_of(rows[0][1])
    else:
        rows = rows[1:]
    if not rows:
        raise InputError(Problem(place, "a header row without values", "one row per frequency"))
    if '"' in text:
        rows, header = _unquoted(rows, delimiter), _unquoted([(0, header)], delimiter)[0][1]
        delimiter = "\t" if delimiter else None
    names = [name.strip() for name in _split(header, delimiter)]
    values = _with_decimal_points([row for _, row in rows], delimiter)
    return _TextTable(place, names, header_line, delimiter, values, [k for k, _ in rows])


def _delimiter_of(header: str) -> str | None:
    return next((mark for mark in _DELIMITERS if mark in header), None)


def _split(line: str, delimiter: str | None) -> list[str]:
    return line.split(delimiter) if delimiter else _BLANKS.split(line.strip())


def _is_numbers(values: Sequence[str]) -> bool:
    return all(_as_number(value) is not None for value in values)


def _commented_header(
    kept: list[tuple[int, str]], first_row: tuple[int, str], place: str
) -> tuple[int, str]:
    """Take the comment just above the first row of numbers for the header, if it has the names."""
    above = [(k, line) for k, line in kept if k < first_row[0]]
    if above:
        number, comment = above[-1]
        names = comment.lstrip(" \t#")
        if len(_split(names, _delimiter_of(first_row[1]))) == len(
            _split(first_row[1], _delimiter_of(first_row[1]))
        ):
            return number, names
    problem = Problem(f"{place}, line {first_row[0]}", "numbers", "a header row with column names")
    raise InputError(problem)


def _unquoted(rows: list[tuple[int, str]], delimiter: str | None) -> list[tuple[int, str]]:
    """Rewrite rows with quoted values as rows between tabs."""
    between = delimiter or " "
    values = csv.reader([row for _, row in rows], delimiter=between, skipinitialspace=True)
    return [(k, "\t".join(row)) for (k, _), row in zip(rows, values, strict=False)]


def _with_decimal_points(rows: list[str], delimiter: str | None) -> list[str]:
    """Turn decimal commas into points, where a comma cannot be anything else."""
    if delimiter == "," or "," not in rows[0]:
        return rows
    if any("." in row for row in rows):
        return rows
    return [row.replace(",", ".") for row in rows]


def _numbers(table: _TextTable, columns: FoundColumns) -> FloatArray:
    """Return the wanted columns, shape (columns, rows), in the file's own units."""
    if _is_even(table):
        try:
            return np.loadtxt(
                table.rows,
                delimiter=table.delimiter,
                usecols=columns.positions,
                ndmin=2,
                comments=None,
                dtype=np.float64,
            ).T
        except ValueError:
            pass
    return _numbers_by_line(table, columns)


def _is_even(table: _TextTable) -> bool:
    """Whether every row has as many values as the header has names."""
    width, mark = len(table.header), table.delimiter
    if mark is None:
        return all(len(_split(row, None)) == width for row in table.rows)
    return all(row.count(mark) == width - 1 for row in table.rows)


def _numbers_by_line(table: _TextTable, columns: FoundColumns) -> FloatArray:
    """Read value by value, and name the first that is no number."""
    values = np.empty((len(columns.positions), len(table.rows)))
    for k, (line, row) in enumerate(zip(table.lines, table.rows, strict=True)):
        parts = _split(row, table.delimiter)
        place = f"{table.place}, line {line}"
        if len(parts) != len(table.header):
            found = f"{len(parts)} values"
            raise InputError(Problem(place, found, f"{len(table.header)}, as the header has"))
        for j, position in enumerate(columns.positions):
            number = _as_number(parts[position])
            if number is None:
                shown = parts[position].strip() or "nothing"
                where = f'{place}, column "{table.header[position]}"'
                raise InputError(Problem(where, f'"{shown}"', "a number"))
            values[j, k] = number
    return values


def _as_number(text: str) -> float | None:
    try:
        return None if "_" in text else float(text)
    except ValueError:
        return None


def _measured(table: _TextTable, columns: FoundColumns, values: FloatArray) -> MeasuredResponse:
    """Bring the columns to one response, and refuse it where it breaks a rule."""
    _refuse_not_finite(table, columns, values)
    moving = values[columns.roles.index("frequency")] != 0.0
    scaled = values[:, moving] * np.array(columns.scales)[:, np.newaxis]
    by_role = dict(zip(columns.roles, scaled, strict=True))
    frequency, response = by_role["frequency"], _response(by_role)
    coherence, variance = by_role.get("coherence"), by_role.get("variance")
    fault = first_fault(frequency, response, coherence, variance)
    if fault:
        lines = [line for line, kept in zip(table.lines, moving, strict=True) if kept]
        place = table.place if fault.index < 0 else f"{table.place}, line {lines[fault.index]}"
        raise InputError(Problem(place, fault.found, fault.expected))
    source = "residuals" if variance is None else "measured"
    rest_lines = int(np.count_nonzero(~moving))
    return MeasuredResponse(frequency, response, variance, coherence, source, rest_lines)


def _refuse_not_finite(table: _TextTable, columns: FoundColumns, values: FloatArray) -> None:
    """Refuse nan and inf, and magnitudes below zero, by line and column.

    A line at rest (0 Hz) is not read, so it may hold anything.
    """
    moving = values[columns.roles.index("frequency")] != 0.0
    for role, position, column in zip(columns.roles, columns.positions, values, strict=True):
        wrong = moving & ~np.isfinite(column)
        if role == "magnitude":
            wrong |= moving & (column < 0)
        if wrong.any():
            k = int(np.argmax(wrong))
            place = f'{table.place}, line {table.lines[k]}, column "{table.header[position]}"'
            expected = "a number, 0 or more" if role == "magnitude" else "a finite number"
            raise InputError(Problem(place, f"{column[k]:g}", expected))


def _response(by_role: dict[str, FloatArray]) -> ComplexArray:
    if "real" in by_role:
        return by_role["real"] + 1j * by_role["imag"]
    with np.errstate(over="ignore", invalid="ignore"):
        if "magnitude_db" in by_role:
            magnitude = 10.0 ** (by_role["magnitude_db"] / 20.0)
        else:
            magnitude = by_role["magnitude"]
        phase = by_role.get("phase_deg", by_role.get("phase_rad"))
        assert phase is not None
        return np.asarray(magnitude * np.exp(1j * phase))
