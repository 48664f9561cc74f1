"""Numbers as a person reads them."""

from collections.abc import Sequence

import numpy as np

_RAISED = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")


def number(value: float, digits: int = 3) -> str:
    """Return a number with so many significant digits; a dash where it is missing."""
    if not np.isfinite(value):
        return "–" if np.isnan(value) else ("∞" if value > 0 else "−∞")
    if value == 0.0:
        return "0"
    magnitude = abs(value)
    if 1e-4 <= magnitude < 1e6:
        decimals = max(0, digits - 1 - int(np.floor(np.log10(magnitude))))
        text = f"{value:.{decimals}f}"
    else:
        digits_of, power = f"{value:.{digits - 1}e}".split("e")
        text = f"{digits_of}×10{str(int(power)).translate(_RAISED)}"
    return text.replace("-", "−")


def percent(share: float, digits: int = 2) -> str:
    """Return a share as a percentage."""
    return f"{number(100.0 * share, digits)} %" if np.isfinite(share) else "–"


def with_interval(value: float, standard_error: float) -> str:
    """Return 'value ± standard error', the value to the decimals that its error warrants."""
    if not np.isfinite(value):
        return "–"
    if not np.isfinite(standard_error) or standard_error <= 0.0:
        return number(value, 4)
    decimals = max(0, 1 - int(np.floor(np.log10(standard_error))))
    if abs(value) >= 1e6 or decimals > 8:
        power = int(np.floor(np.log10(abs(value)))) if value else 0
        scale = 10.0**power
        raised = str(power).translate(_RAISED)
        return f"({with_interval(value / scale, standard_error / scale)})×10{raised}"
    return f"{value:.{decimals}f} ± {standard_error:.{decimals}f}".replace("-", "−")


def counted(count: int, thing: str, things: str = "") -> str:
    """Return '1 unit' or '3 units'."""
    return f"{count} {thing if count == 1 else things or thing + 's'}"


def listed(items: Sequence[str], most: int = 5) -> str:
    """Return 'a, b and c'; past `most` items the number of the others."""
    shown = list(items[:most])
    hidden = len(items) - len(shown)
    if hidden:
        return f"{', '.join(shown)} and {hidden} more"
    if len(shown) < 2:
        return "".join(shown)
    return f"{', '.join(shown[:-1])} and {shown[-1]}"
