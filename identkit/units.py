"""The only conversions between physical units."""

import math

_TO_HERTZ = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9, "rad/s": 1.0 / (2.0 * math.pi)}
_TO_RADIANS = {"rad": 1.0, "radians": 1.0, "deg": math.pi / 180.0, "degrees": math.pi / 180.0}

FREQUENCY_UNITS = ("Hz", "mHz (millihertz)", "kHz", "MHz", "GHz", "rad/s")


def hertz_per(unit: str) -> float:
    """Return how many Hz one `unit` is; ``mHz`` is millihertz and ``MHz`` megahertz.

    Raises
    ------
    KeyError
        If the unit is not a unit of frequency known here.
    """
    if unit.strip() == "mHz":
        return 1e-3
    return _TO_HERTZ[unit.strip().lower()]


def radians_per(unit: str) -> float:
    """Return how many radians one `unit` is.

    Raises
    ------
    KeyError
        If the unit is not a unit of angle known here.
    """
    return _TO_RADIANS[unit.strip().lower()]


def decibels(ratio: float) -> float:
    """Return 20 log10 of a magnitude ratio."""
    return 20.0 * math.log10(ratio)
