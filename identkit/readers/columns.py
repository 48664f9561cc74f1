"""Which column of a text file holds what, and in which unit."""

import difflib
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from identkit.errors import InputError, Problem
from identkit.settings import ColumnSettings, NamedColumn, UnitSettings
from identkit.units import FREQUENCY_UNITS, hertz_per, radians_per

_FORMS = (
    ("real", "imag"),
    ("magnitude", "phase_deg"),
    ("magnitude", "phase_rad"),
    ("magnitude_db", "phase_deg"),
    ("magnitude_db", "phase_rad"),
)
_OPTIONAL = ("coherence", "variance")
_DEFAULT_UNIT = {"frequency": "Hz", "magnitude_db": "dB", "phase_deg": "deg", "phase_rad": "rad"}
_BRACKETS = re.compile(r"[\[(]\s*([^\[\]()]+?)\s*[\])]\s*$")


@dataclass(frozen=True)
class ColumnChoice:
    """One column as the settings name it.

    Attributes
    ----------
    role
        What it holds: "frequency", "real", "magnitude_db" ...
    name
        Its name in the header row.
    unit
        Its unit; empty when it is the plant's own.
    stated
        Whether the user named it, so that a file without it is wrong.
    """

    role: str
    name: str
    unit: str
    stated: bool


@dataclass(frozen=True)
class FoundColumns:
    """Positions of the columns of one file.

    Attributes
    ----------
    roles
        What is read, in the order of `positions`.
    positions
        Column numbers, from 0.
    scales
        Factor that brings each to Hz, rad or the plant's own unit.
    """

    roles: tuple[str, ...]
    positions: tuple[int, ...]
    scales: tuple[float, ...]


def column_choices(columns: ColumnSettings, units: UnitSettings) -> dict[str, ColumnChoice]:
    """Return the column for every role, its unit read from brackets or given beside the name.

    Raises
    ------
    InputError
        If a unit is not one this role can have.
    """
    chosen, problems = {}, []
    for role in ColumnSettings.model_fields:
        choice = _choice(role, columns)
        expected = _unit_expected(choice, units)
        if expected:
            place = f"[responses.columns] {role}"
            problems.append(Problem(place, f'the unit "{choice.unit}"', expected))
        chosen[role] = choice
    if problems:
        raise InputError(problems)
    return chosen


def find_columns(
    header: Sequence[str], choices: dict[str, ColumnChoice], place: str
) -> FoundColumns:
    """Find in a header row the columns to read.

    Raises
    ------
    InputError
        If the frequency, both parts of the response, or a column the user named is missing, or a
        name stands twice; says which columns are there.
    """
    names = [name.strip().strip("\"'").strip().casefold() for name in header]
    there = {role for role, choice in choices.items() if choice.name.casefold() in names}
    form = _form(there, choices)
    wanted = ("frequency", *form, *_OPTIONAL)
    missing = [
        role
        for role in wanted
        if role not in there and (role not in _OPTIONAL or choices[role].stated)
    ]
    if missing:
        raise InputError(_missing_problem(missing, header, choices, there, place))
    roles = tuple(role for role in wanted if role in there)
    for role in roles:
        if names.count(choices[role].name.casefold()) > 1:
            found = f'the column "{choices[role].name}" more than once'
            raise InputError(Problem(place, found, "each column once"))
    positions = tuple(names.index(choices[role].name.casefold()) for role in roles)
    scales = tuple(_scale(choices[role]) for role in roles)
    read_as = tuple("magnitude_db" if _in_decibels(choices[role]) else role for role in roles)
    return FoundColumns(read_as, positions, scales)


def _choice(role: str, columns: ColumnSettings) -> ColumnChoice:
    column = getattr(columns, role)
    stated = role in columns.model_fields_set
    if isinstance(column, NamedColumn):
        return ColumnChoice(role, column.name, column.unit or _DEFAULT_UNIT.get(role, ""), stated)
    bracket = _BRACKETS.search(column)
    unit = bracket.group(1) if bracket else _DEFAULT_UNIT.get(role, "")
    return ColumnChoice(role, column, unit, stated)


def _unit_expected(choice: ColumnChoice, units: UnitSettings) -> str:
    """Return what unit was expected, or nothing when the unit is fine."""
    if choice.role == "frequency":
        return "" if _known(hertz_per, choice.unit) else "one of " + ", ".join(FREQUENCY_UNITS)
    if choice.role in ("phase_deg", "phase_rad"):
        same = _known(radians_per, choice.unit) == radians_per(_DEFAULT_UNIT[choice.role])
        return "" if same else f"{_DEFAULT_UNIT[choice.role]}, as the key says"
    if choice.role == "magnitude_db":
        return "" if choice.unit.casefold() == "db" else "dB, as the key says"
    ratio = f"{units.output}/{units.input}" if units.output and units.input else choice.unit
    if choice.role in _OPTIONAL or choice.unit in ("", ratio) or _in_decibels(choice):
        return ""
    return f'"{ratio}", as [responses.units] says'


def _known(factor: Callable[[str], float], unit: str) -> float:
    """Return the factor of a unit, 0 for an unknown one."""
    try:
        return factor(unit)
    except KeyError:
        return 0.0


def _in_decibels(choice: ColumnChoice) -> bool:
    return choice.role == "magnitude" and choice.unit.casefold() == "db"


def _form(there: set[str], choices: dict[str, ColumnChoice]) -> tuple[str, str]:
    """Choose how the response is written: the user's columns first, then what is there."""
    stated = {role for form in _FORMS for role in form if choices[role].stated}

    def fitness(form: tuple[str, str]) -> tuple[int, int]:
        return len(stated & set(form)), len(there & set(form))

    return max(_FORMS, key=fitness)


def _missing_problem(
    missing: list[str],
    header: Sequence[str],
    choices: dict[str, ColumnChoice],
    there: set[str],
    place: str,
) -> Problem:
    listed = ", ".join(f'"{name}"' for name in header[:20])
    lower = {name.strip().casefold(): name for name in header}
    words = []
    for role in missing:
        name = choices[role].name
        close = difflib.get_close_matches(name.casefold(), lower, n=1, cutoff=0.5)
        words.append(f'"{name}"' + (f' (nearest is "{lower[close[0]]}")' if close else ""))
    expected = "also " + " and ".join(words)
    if not there & {role for form in _FORMS for role in form}:
        expected += ", or magnitude and phase; name others in [responses.columns]"
    return Problem(place, f"the columns {listed}", expected)


def _scale(choice: ColumnChoice) -> float:
    if choice.role == "frequency":
        return hertz_per(choice.unit)
    if choice.role.startswith("phase"):
        return radians_per(choice.unit)
    return 1.0
