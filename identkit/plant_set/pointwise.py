"""Pointwise reach: the least norm of Delta that explains a plant at one frequency, form by form.

| form | plant | least Delta |
|---|---|---|
| additive | P0 + L Delta R | L^-1 (P - P0) R^-1 |
| multiplicative | (I + L Delta R) P0 | L^-1 (P - P0) (R P0)^+ |
| input-multiplicative | P0 (I + L Delta R) | (P0 L)^+ (P - P0) R^-1 |
| inverse-multiplicative | (I + L Delta R)^-1 P0 | L^-1 (P0 P^-1 - I) R^-1 |

The pseudo-inverses give the least norm where a Delta exists: square and tall plants for
"multiplicative" (R P0 has full column rank), square and wide for "input-multiplicative".
"""

from collections.abc import Callable

import numpy as np

from identkit.errors import InputError, Problem
from identkit.plant_set.fields import ComplexArray, FloatArray

Weighted = Callable[[ComplexArray, ComplexArray, ComplexArray, ComplexArray], ComplexArray]


def pointwise_reach(
    form: str,
    plant: ComplexArray,
    nominal: ComplexArray,
    left: ComplexArray,
    right: ComplexArray,
) -> FloatArray:
    """Return the least norm of Delta at every frequency.

    Parameters
    ----------
    form
        Name of the form.
    plant, nominal
        (..., outputs, inputs).
    left, right
        (..., rows, columns) of the two weights.

    Returns
    -------
    FloatArray
        (...,); infinite where no finite Delta explains the plant.

    Raises
    ------
    InputError
        If the form does not fit the shape of the plant.
    """
    outputs, inputs = plant.shape[-2:]
    check_shape(form, outputs, inputs)
    if outputs == inputs == left.shape[-1] == right.shape[-1] == 1:
        return _scalar_reach(form, *(part[..., 0, 0] for part in (plant, nominal, left, right)))
    delta = _DELTA[form](plant, nominal, left, right)
    return np.asarray(np.linalg.norm(delta, ord=2, axis=(-2, -1)))


def check_shape(form: str, outputs: int, inputs: int) -> None:
    """Refuse a form that cannot describe plants of this shape."""
    shape = f"{outputs} outputs and {inputs} inputs"
    fits = {
        "additive": (True, "any shape"),
        "multiplicative": (outputs >= inputs, "at least as many outputs as inputs"),
        "input-multiplicative": (inputs >= outputs, "at least as many inputs as outputs"),
        "inverse-multiplicative": (outputs == inputs, "as many outputs as inputs"),
    }
    if form not in fits:
        raise InputError(Problem("form", repr(form), f"one of {', '.join(fits)} for a reach"))
    if not fits[form][0]:
        raise InputError(Problem(f"form {form!r}", shape, fits[form][1]))


def relative_error(form: str, plant: ComplexArray, nominal: ComplexArray) -> ComplexArray:
    """Return the error that a scalar form compares with its weight."""
    if form == "additive":
        return plant - nominal
    if form == "inverse-multiplicative":
        return nominal / plant - 1.0
    return plant / nominal - 1.0


def _scalar_reach(
    form: str,
    plant: ComplexArray,
    nominal: ComplexArray,
    left: ComplexArray,
    right: ComplexArray,
) -> FloatArray:
    with np.errstate(divide="ignore", invalid="ignore"):
        reach = np.abs(relative_error(form, plant, nominal) / (left * right))
    return np.asarray(np.where(np.isnan(reach), np.where(plant == nominal, 0.0, np.inf), reach))


def _additive(
    plant: ComplexArray, nominal: ComplexArray, left: ComplexArray, right: ComplexArray
) -> ComplexArray:
    return np.linalg.solve(left, plant - nominal) @ np.linalg.inv(right)


def _output(
    plant: ComplexArray, nominal: ComplexArray, left: ComplexArray, right: ComplexArray
) -> ComplexArray:
    return np.linalg.solve(left, plant - nominal) @ np.linalg.pinv(right @ nominal)


def _input(
    plant: ComplexArray, nominal: ComplexArray, left: ComplexArray, right: ComplexArray
) -> ComplexArray:
    return np.linalg.pinv(nominal @ left) @ (plant - nominal) @ np.linalg.inv(right)


def _inverse(
    plant: ComplexArray, nominal: ComplexArray, left: ComplexArray, right: ComplexArray
) -> ComplexArray:
    error = nominal @ np.linalg.inv(plant) - np.eye(plant.shape[-1])
    return np.linalg.solve(left, error) @ np.linalg.inv(right)


_DELTA: dict[str, Weighted] = {
    "additive": _additive,
    "multiplicative": _output,
    "input-multiplicative": _input,
    "inverse-multiplicative": _inverse,
}
