"""One value inside a document together with its name, so that every complaint names the field."""

from collections.abc import Mapping
from typing import Any, NoReturn

import numpy as np

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import FloatArray


class Node:
    """A JSON value and where it stands.

    Parameters
    ----------
    value
        The JSON value.
    file
        The file it came from.
    field
        Its dotted name inside the file; empty at the top.
    """

    def __init__(self, value: Any, file: str, field: str = "") -> None:
        self._value = value
        self._file = file
        self._field = field

    @property
    def place(self) -> str:
        """File and field in words."""
        return f"{self._file}, field {self._field}" if self._field else self._file

    def refuse(self, expected: str) -> NoReturn:
        """Raise an InputError that says what was expected here."""
        raise InputError(Problem(self.place, _short(self._value), expected))

    def expect(self, holds: bool, field: str, expected: str) -> None:
        """Refuse the named field below this one unless `holds`."""
        if not holds:
            self.at(field).refuse(expected)

    def plain(self) -> Any:
        """Return the value as JSON has it."""
        return self._value

    def mapping(self) -> dict[str, Any]:
        """Return the value as a mapping."""
        if not isinstance(self._value, Mapping):
            self.refuse("an object with named fields")
        return dict(self._value)

    def names(self) -> list[str]:
        """Return the names of the fields below this one."""
        return list(self.mapping())

    def maybe(self, name: str) -> "Node | None":
        """Return the named field, or None where it is absent."""
        return self.at(name) if name in self.mapping() else None

    def at(self, name: str) -> "Node":
        """Return the named field."""
        content = self.mapping()
        below = Node(content.get(name), self._file, f"{self._field}.{name}".lstrip("."))
        if name not in content:
            raise InputError(Problem(below.place, "nothing", "this field"))
        return below

    def items(self) -> list["Node"]:
        """Return the elements of a list."""
        if not isinstance(self._value, list):
            self.refuse("a list")
        return [
            Node(item, self._file, f"{self._field}[{index}]")
            for index, item in enumerate(self._value)
        ]

    def text(self) -> str:
        """Return the value as text."""
        if not isinstance(self._value, str):
            self.refuse("a text")
        return self._value

    def texts(self) -> tuple[str, ...]:
        """Return the value as texts."""
        return tuple(item.text() for item in self.items())

    def flag(self) -> bool:
        """Return the value as true or false."""
        if not isinstance(self._value, bool):
            self.refuse("true or false")
        return self._value

    def number(self) -> float:
        """Return the value as a finite number."""
        if isinstance(self._value, bool) or not isinstance(self._value, int | float):
            self.refuse("a number")
        if not np.isfinite(self._value):
            self.refuse("a finite number")
        return float(self._value)

    def whole(self) -> int:
        """Return the value as a whole number."""
        if isinstance(self._value, bool) or not isinstance(self._value, int):
            self.refuse("a whole number")
        return self._value

    def label(self) -> str | float:
        """Return the value as a label: text or number."""
        return self.text() if isinstance(self._value, str) else self.number()

    def span(self) -> tuple[float, float]:
        """Return the value as [low, high]."""
        low, high = self.vector(2)
        if low > high:
            self.refuse("two increasing numbers")
        return float(low), float(high)

    def vector(self, size: int | None = None) -> FloatArray:
        """Return the value as (size,) numbers."""
        values = self._array("a list of numbers")
        return self._shaped(values, (values.size if size is None else size,))

    def matrix(self, shape: tuple[int, int] | None = None) -> FloatArray:
        """Return the value as a matrix of the given shape."""
        values = self._array("a matrix of numbers")
        if shape is None and values.ndim != 2:
            self.refuse("a matrix of numbers")
        return self._shaped(values, values.shape if shape is None else shape)

    def matrices(self, shape: tuple[int, int, int]) -> FloatArray:
        """Return the value as a list of matrices."""
        return self._shaped(self._array("a list of matrices"), shape)

    def _array(self, expected: str) -> FloatArray:
        if not isinstance(self._value, list):
            self.refuse(expected)
        try:
            raw = np.asarray(self._value)
        except ValueError:
            self.refuse(f"{expected} with rows of one length")
        if raw.size == 0:
            return raw.astype(float)
        if raw.dtype.kind not in "iuf" or not np.isfinite(raw).all():
            self.refuse(f"{expected}, all of them finite")
        return raw.astype(float)

    def _shaped(self, values: FloatArray, shape: tuple[int, ...]) -> FloatArray:
        # JSON cannot tell a (0, 3) from a (0,) array: an empty one takes the shape it should have.
        if values.size == 0 and 0 in shape:
            return values.reshape(shape)
        if values.shape != shape:
            self.refuse(f"numbers of shape {shape}, not {values.shape}")
        return values


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
