"""Which responses stay out of nominal and bound, and why; the only way out is by the settings."""

from collections.abc import Mapping, Sequence

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets
from identkit.stages.screen import marked_responses

Rule = tuple[Mapping[str, str | float], str]
"""Labels that must all match, and the reason to print."""


def left_out(
    responses: Gridded,
    screening: Gridded,
    *,
    exclude: Sequence[Rule] = (),
    leave_out: Sequence[str] = (),
) -> dict[str, str]:
    """Return the responses the settings leave out of nominal and bound, with the reason of each.

    Parameters
    ----------
    responses, screening
        Measured responses and their marks.
    exclude
        Rules of [bound] exclude.
    leave_out
        Marks of [screen] leave_out.

    Raises
    ------
    InputError
        If a rule names a label the campaign does not have, or matches no response.
    """
    reasons = {
        name: f"screening: {reason}"
        for name, reason in marked_responses(screening, leave_out).items()
    }
    for labels, reason in exclude:
        words = ", ".join(f"{key} {value}" for key, value in labels.items())
        matches = [name for part in datasets(responses) for name in _matching(part, labels)]
        if not matches:
            raise InputError(
                Problem(f"[bound] exclude, {words}", "no such response", "labels of a response")
            )
        reasons.update({name: f"{words}: {reason}" if reason else words for name in matches})
    return reasons


def _matching(part: xr.Dataset, labels: Mapping[str, str | float]) -> list[str]:
    chosen = np.ones(part.sizes["response"], dtype=bool)
    for label, value in labels.items():
        if label not in part.coords or part[label].dims != ("response",):
            known = sorted(str(k) for k in part.coords if part[k].dims == ("response",))
            raise InputError(
                Problem("[bound] exclude", f'label "{label}"', f"one of {', '.join(known)}")
            )
        column = part[label].values
        numeric = column.dtype.kind == "f" and not isinstance(value, str)
        chosen &= column == float(value) if numeric else column.astype(str) == _text(value)
    return [str(name) for name in part["response"].values[chosen]]


def _text(value: str | float) -> str:
    return value if isinstance(value, str) else f"{value:g}"
