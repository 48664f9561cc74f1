"""Interconnections of all scalar forms, closed around blocks, against the plants they stand for."""

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.forms.catalogue import FORMS, form_named
from identkit.plant_set.fields import Matrices
from identkit.plant_set.sample import close_upper


def system(rng: np.random.Generator, states: int, rows: int, columns: int) -> Matrices:
    a = rng.normal(size=(states, states)) - 3.0 * np.eye(states)
    parts = [rng.normal(size=size) for size in ((states, columns), (rows, states), (rows, columns))]
    return Matrices(a, *parts)


def value(part: Matrices, s: complex) -> np.ndarray:
    return part.D + part.C @ np.linalg.solve(s * np.eye(part.states) - part.A, part.B)


MADE = {
    "additive": lambda p, e: p + e,
    "multiplicative": lambda p, e: (np.eye(len(p)) + e) @ p,
    "input-multiplicative": lambda p, e: p @ (np.eye(p.shape[1]) + e),
    "inverse-multiplicative": lambda p, e: np.linalg.inv(np.eye(len(p)) + e) @ p,
}


CASES = [
    (name, *shape)
    for name in FORMS
    for shape in ((1, 1), (2, 2), (2, 1), (1, 2))
    if shape[0] == shape[1] or name != "inverse-multiplicative"
]


@pytest.mark.parametrize(("name", "outputs", "inputs"), CASES)
def test_closed_interconnections_are_the_plants_of_the_form(name, outputs, inputs) -> None:
    rng = np.random.default_rng(7)
    at_input = name in ("additive", "input-multiplicative")
    rows = inputs if name == "input-multiplicative" else outputs
    columns = inputs if at_input else outputs
    nominal, left = system(rng, 4, outputs, inputs), system(rng, 3, rows, 2)
    right, delta = system(rng, 2, 3, columns), system(rng, 2, 2, 3)
    closed = close_upper(FORMS[name].interconnection(nominal, left, right), delta)
    for s in (0.3j, 2.0j, 40.0j):
        error = value(left, s) @ value(delta, s) @ value(right, s)
        np.testing.assert_allclose(
            value(closed, s), MADE[name](value(nominal, s), error), rtol=1e-9
        )


def test_unknown_forms_are_refused_with_those_there_are() -> None:
    assert form_named("additive").name == "additive"
    with pytest.raises(InputError, match="'parametric'"):
        form_named("parametric")
