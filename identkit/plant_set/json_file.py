"""Plant set documents in JSON: exact numbers, no NaN, replaced whole or not at all."""

import json
from pathlib import Path
from typing import Any, NoReturn

from identkit.atomic import write_text
from identkit.errors import InputError, Problem


def write_json(document: dict[str, Any], path: Path) -> None:
    """Replace `path` by the document.

    Raises
    ------
    ValueError
        If a number is not finite; JSON has no word for it.
    """
    write_text(path, json.dumps(document, indent=1, allow_nan=False) + "\n")


def read_json(path: Path) -> Any:
    """Return the document.

    Raises
    ------
    InputError
        If the file is not there, not JSON, cut short, or holds NaN or infinities.
    """
    try:
        return json.loads(path.read_text(encoding="utf-8"), parse_constant=_refuse_constant(path))
    except OSError as error:
        raise InputError(Problem(str(path), error.strerror or "no file", "a set file")) from error
    except json.JSONDecodeError as error:
        place = f"{path}, line {error.lineno}"
        raise InputError(Problem(place, f"{error.msg}", "a complete JSON document")) from error
    except UnicodeDecodeError as error:
        raise InputError(Problem(str(path), "bytes that are not UTF-8", "JSON text")) from error


def _refuse_constant(path: Path) -> Any:
    def refuse(name: str) -> NoReturn:
        raise InputError(Problem(str(path), name, "finite numbers only"))

    return refuse
