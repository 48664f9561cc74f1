"""The JSON Schema of the plant set file, and checking a document against it."""

import json
from collections.abc import Iterator
from functools import cache
from importlib import import_module, resources
from importlib.util import find_spec
from typing import Any

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import FORMAT

PROBLEMS_SHOWN = 10
_NUMBER = {"type": "number"}


@cache
def schema() -> dict[str, Any]:
    """Return the schema shipped with the package (JSON Schema 2020-12)."""
    text = resources.files("identkit.plant_set").joinpath("schema.json").read_text("utf-8")
    content: dict[str, Any] = json.loads(text)
    return content


def check_schema(document: Any, place: str) -> bool:
    """Check a document against the schema.

    Parameters
    ----------
    document
        JSON values.
    place
        File named in the messages.

    Returns
    -------
    bool
        False where the validating library is not installed: the reader's own checks must do.

    Raises
    ------
    InputError
        With one problem per field that breaks the schema.
    """
    stated = document.get("format") if isinstance(document, dict) else None
    if stated != FORMAT:
        found = "no set file" if stated is None else f"a file of format {stated!r}"
        raise InputError(Problem(place, found, f"a set file, of format {FORMAT!r}"))
    if find_spec("jsonschema") is None:
        return False
    errors = sorted(
        _validator().iter_errors(document), key=lambda error: list(map(str, error.path))
    )
    if errors:
        # every missing field of one object is an error of its own with the same sentence
        problems = dict.fromkeys(_problem(error, place) for error in errors)
        raise InputError(list(problems)[:PROBLEMS_SHOWN])
    return True


@cache
def _validator() -> Any:
    """Build the validator; lists of plain numbers are checked in one go, they are long."""
    library = import_module("jsonschema")
    base = library.Draft202012Validator
    slow_items = base.VALIDATORS["items"]

    def items(validator: Any, rule: Any, instance: Any, parent: Any) -> Iterator[Any]:
        plain = rule == _NUMBER and isinstance(instance, list)
        if plain and all(type(value) in (float, int) for value in instance):
            return
        yield from slow_items(validator, rule, instance, parent)

    return library.validators.extend(base, {"items": items})(schema())


def _problem(error: Any, place: str) -> Problem:
    field = "".join(
        f"[{part}]" if isinstance(part, int) else f".{part}" for part in error.absolute_path
    ).lstrip(".")
    where = f"{place}, field {field}" if field else place
    found = repr(error.instance)
    found = found if len(found) <= 60 else found[:57] + "..."
    return Problem(where, found, _expected(error))


def _expected(error: Any) -> str:
    """Say in words what the rule that failed asks for."""
    rule = error.validator
    value = error.validator_value
    if rule == "required":
        return f"the fields {', '.join(value)}"
    if rule == "additionalProperties":
        return f"no other fields than those of the format ({error.message})"
    if rule in ("enum", "const"):
        return f"one of {value}" if rule == "enum" else repr(value)
    if rule == "type":
        return f"a value of type {value}"
    return f"{rule} {value}"
