"""One measured response as plain arrays, and the rules every measured response must keep."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray
from identkit.methods.coherence_variance import coherence_variance

VARIANCE_SOURCES = ("measured", "coherence", "residuals")
_ROUNDING = 1e-6  # a coherence printed as 1.0000003 is 1 within its digits


@dataclass(frozen=True)
class MeasuredResponse:
    """One scalar response.

    Attributes
    ----------
    frequency
        Hz, increasing.
    response
        Output unit / input unit.
    variance
        E|error|^2, total of both parts, or None.
    coherence
        Magnitude-squared coherence, or None.
    variance_source
        "measured", "coherence" or "residuals" (none given: to be estimated by the fit).
    rest_lines
        Lines at 0 Hz that were left out.
    usable
        Points that may be used, where the file marks them.
    input_unit, output_unit
        Units of the plant's input and output, where the file states them.
    """

    frequency: FloatArray
    response: ComplexArray
    variance: FloatArray | None
    coherence: FloatArray | None
    variance_source: str
    rest_lines: int = 0
    usable: BoolArray | None = None
    input_unit: str = ""
    output_unit: str = ""


def with_variance(measured: MeasuredResponse, averages: float | None) -> MeasuredResponse:
    """Return a response with the variance that its coherence gives, where it has no other."""
    if measured.variance is not None or measured.coherence is None or averages is None:
        return measured
    variance = coherence_variance(measured.response, measured.coherence, averages)
    return replace(measured, variance=variance, variance_source="coherence")


@dataclass(frozen=True)
class Fault:
    """The first point that breaks a rule: its index, what is there, what should be."""

    index: int
    found: str
    expected: str


def first_fault(
    frequency: FloatArray,
    response: ComplexArray,
    coherence: FloatArray | None,
    variance: FloatArray | None,
) -> Fault | None:
    """Return the first broken rule of a response, or None when all is well."""
    rules: list[Callable[[], Fault | None]] = [
        lambda: _at(~np.isfinite(frequency), frequency, "the frequency {}", "a finite number"),
        lambda: _at(frequency <= 0, frequency, "the frequency {} Hz", "a frequency above 0 Hz"),
        lambda: _disorder(frequency),
        lambda: _at(~np.isfinite(response), response, "the response {}", "a finite number"),
        lambda: _at(response == 0, response, "the response 0", "a response that is not zero"),
        lambda: _coherence_fault(coherence),
        lambda: _variance_fault(variance),
    ]
    for rule in rules:
        fault = rule()
        if fault:
            return fault
    if len(frequency) < 2:
        points = "no point" if len(frequency) == 0 else "1 point"
        return Fault(-1, f"{points} above 0 Hz", "at least 2 points")
    return None


def _at(
    wrong: BoolArray, values: FloatArray | ComplexArray, found: str, expected: str
) -> Fault | None:
    if not wrong.any():
        return None
    index = int(np.argmax(wrong))
    return Fault(index, found.format(f"{values[index]:.8g}"), expected)


def _disorder(frequency: FloatArray) -> Fault | None:
    step = np.diff(frequency)
    if (step > 0).all():
        return None
    index = int(np.argmax(step <= 0)) + 1
    after = f"{frequency[index]:.8g} Hz after {frequency[index - 1]:.8g} Hz"
    if step[index - 1] == 0:
        return Fault(index, f"the frequency {after}", "every frequency once")
    return Fault(index, f"the frequency {after}", "increasing frequencies")


def _coherence_fault(coherence: FloatArray | None) -> Fault | None:
    if coherence is None:
        return None
    wrong = ~((coherence >= 0) & (coherence <= 1 + _ROUNDING))
    return _at(wrong, coherence, "the coherence {}", "a coherence from 0 to 1")


def _variance_fault(variance: FloatArray | None) -> Fault | None:
    if variance is None:
        return None
    wrong = ~((variance > 0) & np.isfinite(variance))
    return _at(wrong, variance, "the variance {}", "a variance above 0")
