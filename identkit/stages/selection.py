"""Which responses stay out of nominal and bound, and why; the only way out is by the settings."""

from collections.abc import Mapping, Sequence

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets
from identkit.stages.screen import marked_responses

Rule = tuple[Mapping[str, str | float], str]
"""Labels that must all match, and the reason to print."""

HELD_OUT = "held out to state the coverage"


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


def held_out(
    responses: Gridded,
    reasons: Mapping[str, str],
    *,
    share: float,
    seed: int,
    by: str = "unit",
) -> dict[str, str]:
    """Draw the units (or lots) that nominal and bound must not see, so that coverage can be stated.

    Parameters
    ----------
    responses
        Measured responses.
    reasons
        What is left out for another reason; a unit of which nothing else is left is not drawn.
    share
        Share of the units to hold out, rounded to whole units; 0 holds out none.
    seed
        Of the random draw.
    by
        "unit" or "lot": what the next draw is.

    Returns
    -------
    dict
        Unit by response id. Responses left out for another reason are not in it.

    Raises
    ------
    InputError
        If a share is asked for that leaves fewer than two units on the one side or none on the
        other, or the campaign has no such label.
    """
    if share <= 0.0:
        return {}
    groups = {name: group for name, group in _groups(responses, by).items() if name not in reasons}
    names = sorted(set(groups.values()))
    count = round(share * len(names))
    if count < 1 or len(names) - count < 2:
        found = f"{share:g}, which holds out {count} of {len(names)} {by}s"
        expected = f"a share that holds out at least one {by} and keeps at least two"
        raise InputError(Problem("[bound] hold_out", found, expected))
    drawn = set(np.random.default_rng(seed).permutation(names)[:count].tolist())
    return {name: group for name, group in groups.items() if group in drawn}


def _groups(responses: Gridded, by: str) -> dict[str, str]:
    groups: dict[str, str] = {}
    for part in datasets(responses):
        if by not in part.coords:
            raise InputError(
                Problem("[bound] hold_out", f'no label "{by}"', f"responses labelled by {by}")
            )
        names, values = part["response"].values.astype(str), part[by].values.astype(str)
        groups.update(zip(names.tolist(), values.tolist(), strict=True))
    return groups


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
