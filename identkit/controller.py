"""A designer's own controller, read from a small JSON file or a table of zeros and poles.

State space:

    {"A": [[...]], "B": [[...]], "C": [[...]], "D": [[...]], "period": 2e-5}

or zeros, poles and gain, k prod(s - zeros) / prod(s - poles), complex ones as [real, imaginary]:

    {"zeros": [-300.0, [-50.0, 900.0], [-50.0, -900.0]], "poles": [0.0, -4e4, -4e4], "gain": 2e3}

in rad/s, or in z where a `period` (s) above 0 stands beside them. The same as columns of a text
file: `zero_real`, `zero_imag`, `pole_real`, `pole_imag`, `gain` and optionally `period`, cells
below the last root left empty. The controller acts as u = -K y.
"""

import csv
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.state_space import StateSpace, series
from identkit.plant_set.fields import Matrices
from identkit.plant_set.node import Node
from identkit.plant_set.response import balance

MATRICES = ("A", "B", "C", "D")
ROOTS = ("zeros", "poles", "gain")
KINDS = "A, B, C, D or zeros, poles, gain; optionally period and name"
PAIRED = 1e-9


@dataclass(frozen=True)
class Controller:
    """A linear controller, u = -K y.

    Attributes
    ----------
    system
        Its matrices; in z where `period` is above 0.
    period
        s; 0 for continuous time.
    name
        What to call it.
    """

    system: StateSpace
    period: float = 0.0
    name: str = "controller"


def read_controller(path: str | Path) -> Controller:
    """Read a controller file.

    Parameters
    ----------
    path
        JSON, or a text table where the suffix is .csv or .txt.

    Raises
    ------
    InputError
        If the file is missing or wrong; names the field, what was found and what was expected.
    """
    place = Path(path)
    if not place.is_file():
        raise InputError(Problem(str(path), "no such file", "a controller file"))
    try:
        text = place.read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise InputError(Problem(str(path), "bytes that are no text", "UTF-8 text")) from error
    if place.suffix.lower() in (".csv", ".txt"):
        return controller_from(_table(text, str(path)), str(path))
    try:
        content = json.loads(text)
    except (json.JSONDecodeError, RecursionError) as error:
        where = f"{path}, line {getattr(error, 'lineno', 1)}"
        raise InputError(Problem(where, "text that is no JSON", "a JSON object")) from error
    return controller_from(content, str(path))


def controller_from(content: Any, place: str = "controller") -> Controller:
    """Return the controller that a JSON object describes; `place` names it in complaints."""
    node = Node(content, place)
    names = set(node.names())
    unknown = sorted(names - {*MATRICES, *ROOTS, "period", "name"})
    if unknown or not (names >= set(MATRICES)) ^ (names >= set(ROOTS)):
        found = f"unknown field {unknown[0]!r}" if unknown else f"fields {', '.join(sorted(names))}"
        raise InputError(Problem(place, found if names else "no field", KINDS))
    period_node = node.maybe("period")
    period = period_node.number() if period_node is not None else 0.0
    node.expect(period >= 0.0, "period", "seconds, 0 or more")
    system = _from_matrices(node) if "A" in names else _from_roots(node)
    name = node.maybe("name")
    return Controller(system, period, name.text() if name is not None else Path(place).stem)


def _from_matrices(node: Node) -> StateSpace:
    feed = node.at("D").matrix()
    rows, columns = feed.shape
    a = node.at("A").matrix() if node.at("A").items() else np.zeros((0, 0))
    states = a.shape[0]
    node.expect(a.shape == (states, states), "A", "a square matrix")
    node.expect(min(rows, columns) > 0, "D", "one row per output and one column per input")
    b, c = node.at("B").matrix((states, columns)), node.at("C").matrix((rows, states))
    return _even(StateSpace(a, b, c, feed))


def _from_roots(node: Node) -> StateSpace:
    zeros, poles = _roots(node.at("zeros")), _roots(node.at("poles"))
    proper = f"at most {poles.size} zeros, one per pole: a controller must be proper"
    node.expect(zeros.size <= poles.size, "zeros", proper)
    return state_space_of_roots(zeros, poles, node.at("gain").number())


def _roots(node: Node) -> ComplexArray:
    items = node.items()
    found = np.array([_root(item) for item in items], dtype=complex)
    for root, item in zip(found, items, strict=True):
        partners = np.abs(found - np.conj(root)) <= PAIRED * abs(root)
        alike = np.abs(found - root) <= PAIRED * abs(root)
        if root.imag and partners.sum() != alike.sum():
            item.refuse("its complex conjugate in the list as well")
    return found


def _root(item: Node) -> complex:
    if isinstance(item.plain(), list):
        real, imaginary = item.vector(2)
        return complex(real, imaginary)
    return complex(item.number())


def _table(text: str, place: str) -> dict[str, Any]:
    """Return a table's columns as the JSON object they stand for."""
    lines = [line for line in text.splitlines() if line.strip() and not line.startswith("#")]
    rows = list(csv.DictReader(lines, skipinitialspace=True))
    columns = {"zero_real", "zero_imag", "pole_real", "pole_imag", "gain"}
    header = {str(name).strip() for name in (rows[0] if rows else {})}
    if not header >= columns or not header <= {*columns, "period"}:
        expected = f"the columns {', '.join(sorted(columns))} and optionally period"
        raise InputError(Problem(place, "other columns", expected))
    content: dict[str, Any] = {
        kind + "s": [
            [_cell(row, f"{kind}_{part}", place, at) or 0.0 for part in ("real", "imag")]
            for at, row in enumerate(rows, start=2)
            if _cell(row, f"{kind}_real", place, at) is not None
        ]
        for kind in ("zero", "pole")
    }
    for name in ("gain", "period"):
        value = _cell(rows[0], name, place, 2)
        content |= {} if value is None else {name: value}
    return content


def _cell(row: dict[str, Any], name: str, place: str, line: int) -> float | None:
    text = (row.get(name) or "").strip()
    if not text:
        return None
    try:
        return float(text)
    except ValueError as error:
        where = f"{place}, row {line}, column {name}"
        raise InputError(Problem(where, repr(text), "a number")) from error


def state_space_of_roots(zeros: ComplexArray, poles: ComplexArray, gain: float) -> StateSpace:
    """Return gain prod(s - zeros) / prod(s - poles) as sections of order 1 and 2 in series.

    Parameters
    ----------
    zeros, poles
        Closed under conjugation, at most as many zeros as poles; poles at the origin are fine.
    gain
        Factor in front.
    """
    below, above = _factors(poles), _factors(zeros)
    none = np.zeros((0, 0))
    whole = StateSpace(none, np.zeros((0, 1)), np.zeros((1, 0)), np.array([[gain]]))
    for bottom in below:
        fitting = [top for top in above if top.size <= bottom.size]
        # Sections that leave a first-order zero for the first-order pole at the end.
        top = max(fitting, key=lambda item: item.size, default=np.ones(1))
        if fitting:
            above = [item for item in above if item is not top]
        whole = series(whole, _section(top, bottom))
    return _even(whole)


def _factors(roots: ComplexArray) -> list[FloatArray]:
    """Return polynomials of order 2, and one of order 1 where the number of roots is odd."""
    complex_ones = roots[roots.imag > 0.0]
    found = [np.array([1.0, -2.0 * r.real, abs(r) ** 2]) for r in sorted(complex_ones, key=abs)]
    real = sorted(roots[roots.imag == 0.0].real, key=abs)
    while len(real) > 1:
        first, second = real.pop(0), real.pop(0)
        found.append(np.array([1.0, -(first + second), first * second]))
    return [*found, *(np.array([1.0, -root]) for root in real)]


def _section(top: FloatArray, bottom: FloatArray) -> StateSpace:
    order = bottom.size - 1
    numerator = np.concatenate([np.zeros(bottom.size - top.size), top])
    rest = numerator[1:] - numerator[0] * bottom[1:]
    drift = np.zeros((order, order))
    drift[-1] = -bottom[:0:-1]
    drift[:-1, 1:] = np.eye(order - 1)
    driven = np.zeros((order, 1))
    driven[-1] = 1.0
    return StateSpace(drift, driven, rest[None, ::-1], numerator[:1, None])


def _even(system: StateSpace) -> StateSpace:
    """Scale the states so that rows and columns of A are of equal size."""
    if not system.states:
        return system
    even = balance(Matrices(system.A, system.B, system.C, system.D))
    return StateSpace(even.A, even.B, even.C, even.D)
