"""One clear sentence for everything that can be wrong with a study file."""

import difflib
import re
import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from identkit.errors import InputError, Problem

_HEADER = re.compile(r"^\s*\[\s*([^\[\]]+?)\s*\]\s*(#.*)?$")
_TOML_PLACE = re.compile(r"\s*\(at (line \d+, column \d+|end of document)\)$")


def read_toml(path: Path) -> tuple[dict[str, Any], str]:
    """Read a TOML file; give its tables and its text.

    Raises
    ------
    InputError
        If the file cannot be read, is not UTF-8, or breaks the rules of TOML (with the line).
    """
    text = _read_utf8(path, "a study file in TOML")
    try:
        return tomllib.loads(text), text
    except tomllib.TOMLDecodeError as error:
        raise InputError(_syntax_problem(path, str(error))) from None


def problems_of(
    error: ValidationError, model: type[BaseModel], tables: dict[str, Any], file: str, text: str
) -> list[Problem]:
    """Translate what the checking library found into one sentence per key."""
    by_key: dict[tuple[str, ...], Problem] = {}
    for detail in error.errors(include_url=False):
        location = tuple(str(part) for part in detail["loc"])
        keys, field = _known_part(model, location)
        if detail["type"] == "extra_forbidden" and len(location) == len(keys) + 1:
            problem = _unknown_key(model, location, file, text)
            by_key[location] = problem
            continue
        value = _value_at(tables, keys)
        problem = Problem(_place(file, keys, text), _shown(value), _expected(field, detail))
        by_key.setdefault(keys, problem)
    return list(by_key.values())


def nearest(word: str, known: Sequence[str]) -> str:
    """Return the known word most like `word`, or an empty text when none is close."""
    by_lower = {name.lower(): name for name in known}
    found = difflib.get_close_matches(word.lower(), by_lower, n=1, cutoff=0.5)
    return by_lower[found[0]] if found else ""


def _read_utf8(path: Path, expected: str) -> str:
    try:
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        found = "no such file"
    except IsADirectoryError:
        found = "a folder"
    except PermissionError:
        found = "no permission to read it"
    except UnicodeDecodeError as error:
        line = error.object[: error.start].count(b"\n") + 1
        found = f"a byte that is not UTF-8 in line {line}"
    raise InputError(Problem(str(path), found, expected))


def _syntax_problem(path: Path, message: str) -> Problem:
    place = _TOML_PLACE.search(message)
    where = f"{path}, {place.group(1)}" if place else str(path)
    what = _TOML_PLACE.sub("", message)
    return Problem(where, f"a mistake in TOML ({what})", "key = value, or [table]")


def _known_part(
    model: type[BaseModel], location: tuple[str, ...]
) -> tuple[tuple[str, ...], FieldInfo | None]:
    """Walk down the tables as far as the location names them; give the keys and the last field."""
    keys: list[str] = []
    field: FieldInfo | None = None
    inside: type[BaseModel] | None = model
    for part in location:
        if inside is None or part not in inside.model_fields:
            break
        field = inside.model_fields[part]
        keys.append(part)
        inside = _table_of(field.annotation)
    return tuple(keys), field


def _table_of(annotation: Any) -> type[BaseModel] | None:
    """Return the table a field holds, if it holds nothing but a table (or none)."""
    candidates = [part for part in get_args(annotation) if part is not type(None)] or [annotation]
    only = candidates[0] if len(candidates) == 1 else None
    return only if isinstance(only, type) and issubclass(only, BaseModel) else None


def _unknown_key(model: type[BaseModel], keys: tuple[str, ...], file: str, text: str) -> Problem:
    inside: type[BaseModel] = model
    for key in keys[:-1]:
        inside = _table_of(inside.model_fields[key].annotation) or inside
    known = list(inside.model_fields)
    close = nearest(keys[-1], known)
    what = f"a key of [{'.'.join(keys[:-1])}]" if keys[:-1] else "a table of the study file"
    hint = f"the nearest is {close!r}" if close else "known are " + ", ".join(known)
    return Problem(_place(file, keys, text), f"the unknown key {keys[-1]!r}", f"{what}; {hint}")


def _expected(field: FieldInfo | None, detail: Any) -> str:
    if field is not None and field.description:
        reason = detail.get("ctx", {}).get("error")
        return f"{field.description} ({reason})" if reason else field.description
    if field is not None and _table_of(field.annotation):
        return "a table of keys"
    return str(detail["msg"])


def _value_at(tables: dict[str, Any], keys: tuple[str, ...]) -> Any:
    value: Any = tables
    for key in keys:
        value = value.get(key) if isinstance(value, dict) else None
    return value


def _shown(value: Any) -> str:
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "a table"
    shown = f'"{value}"' if isinstance(value, str) else str(value)
    return shown if len(shown) <= 80 else shown[:77] + "..."


def _place(file: str, keys: tuple[str, ...], text: str) -> str:
    table, key = ".".join(keys[:-1]), keys[-1] if keys else ""
    name = f"[{table}] {key}" if table else f"[{key}]"
    line = _line_of(text, table, key)
    return f"{file}, {name} (line {line})" if line else f"{file}, {name}"


def _line_of(text: str, table: str, key: str) -> int:
    """Find the line of a key by reading headers and keys; 0 when it is written another way."""
    inside = ""
    assigned = re.compile(rf"^\s*[\"']?{re.escape(key)}[\"']?\s*=")
    whole = f"{table}.{key}" if table else key
    for number, line in enumerate(text.splitlines(), start=1):
        header = _HEADER.match(line)
        if header:
            inside = header.group(1).replace('"', "")
            if inside == whole:
                return number
        elif inside == table and assigned.match(line):
            return number
    return 0
