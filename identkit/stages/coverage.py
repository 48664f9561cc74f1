"""Coverage: what may be said about the next unit, and what may not.

Only units kept out of nominal and bound give an exact, distribution-free statement (Wilks 1941,
methods/tolerance_limits.py). Without them the set holds what was measured, and no more is said.
"""

from collections.abc import Mapping, Sequence

from identkit.errors import InputError, Problem
from identkit.methods.tolerance_limits import (
    binomial_lower_limit,
    tolerance_content,
    tolerance_sample_size,
)
from identkit.plant_set.fields import FittedPlant

CAUTION = "This figure is no safety certificate."


def state_coverage(
    largest_reach: Mapping[str, float] | None = None,
    *,
    content: float = 0.9,
    confidence: float = 0.9,
    exchangeable: str = "unit",
    rejected: Sequence[str] = (),
) -> dict[str, object]:
    """State the share of future units that the set holds (Wilks 1941).

    Parameters
    ----------
    largest_reach
        Largest reach over the responses of each held-out unit (or lot), by its name; empty or
        None when none was held out. Reach at most 1 is held.
    content, confidence
        Wanted share of future units and wanted confidence.
    exchangeable
        What the next draw is, "unit" or "lot".
    rejected
        Held-out units (or lots) left out by screening; each counts as not held.

    Returns
    -------
    dict
        ``content`` (share reached; None where nothing is claimed), ``confidence``, ``units``,
        ``held``, ``method``, ``assumptions`` (list), ``sentence``, ``units_needed``.

    Raises
    ------
    InputError
        If content or confidence is not between 0 and 1.

    Notes
    -----
    With every one of N held-out units held, at least ``(1 - confidence)**(1 / N)`` of all units
    are. With some not held the exact one-sided binomial limit (Clopper and Pearson 1934) is
    stated instead. Both need draws that are independent and alike, and a set that was fixed
    before the held-out units were looked at.
    """
    for name, value in (("content", content), ("confidence", confidence)):
        if not 0.0 < value < 1.0:
            raise InputError(Problem(f"[bound] {name}", f"{value:g}", "a share between 0 and 1"))
    needed = {
        "90/90": tolerance_sample_size(0.90, 0.90),
        "95/95": tolerance_sample_size(0.95, 0.95),
        "wanted": tolerance_sample_size(content, confidence),
    }
    reach = dict(largest_reach or {})
    if not reach and not rejected:
        return _no_claim(content, confidence, exchangeable, needed)
    reach.update({name: float("inf") for name in rejected})
    return _claim(reach, content, confidence, exchangeable, needed)


def largest_reach_by_group(
    plants: Sequence[FittedPlant], groups: Mapping[str, str]
) -> dict[str, float]:
    """Return the largest reach of every held-out unit (or lot).

    Parameters
    ----------
    plants
        The plants of a set, with their reach.
    groups
        Unit (or lot) by response id. A response without a plant, because its fit failed or no set
        of this form can hold it, counts as infinitely far.
    """
    reach = {plant.response: plant.reach for plant in plants}
    largest: dict[str, float] = {}
    for response, group in groups.items():
        own = reach.get(response, float("inf"))
        largest[group] = max(own, largest.get(group, 0.0))
    return largest


def _no_claim(
    content: float, confidence: float, exchangeable: str, needed: dict[str, int]
) -> dict[str, object]:
    sentence = (
        f"The set holds the plants that were measured; nothing is claimed about the next "
        f"{exchangeable}. A distribution-free statement needs {exchangeable}s held out from "
        f"nominal and bound: {needed['90/90']} for 90 % content at 90 % confidence, "
        f"{needed['95/95']} for 95 % at 95 %{_also(content, confidence, needed)}. {CAUTION}"
    )
    return {
        "content": None,
        "confidence": confidence,
        "units": 0,
        "held": 0,
        "method": "none: no units held out",
        "assumptions": [],
        "sentence": sentence,
        "units_needed": needed,
    }


def _claim(
    reach: dict[str, float],
    content: float,
    confidence: float,
    exchangeable: str,
    needed: dict[str, int],
) -> dict[str, object]:
    units = len(reach)
    # Anything that is not a number at most 1 counts against the set.
    held = sum(1 for value in reach.values() if value <= 1.0)
    if held == units:
        reached = tolerance_content(units, confidence)
        method = "distribution-free, one-sided, first order (Wilks 1941)"
    else:
        reached = binomial_lower_limit(held, units, confidence)
        method = "exact one-sided binomial limit (Clopper and Pearson 1934)"
    outside = sorted(name for name, value in reach.items() if not value <= 1.0)
    verdict = "reached" if reached >= content else "not reached"
    sentence = (
        f"{held} of {units} held-out {exchangeable}s are held"
        + (f" (not held: {', '.join(outside)})" if outside else "")
        + f": with {100 * confidence:g} % confidence the set holds at least "
        f"{100 * reached:.1f} % of all {exchangeable}s; the {100 * content:g} % asked for is "
        f"{verdict} ({needed['wanted']} held-out {exchangeable}s, all held, are needed). {CAUTION}"
    )
    return {
        "content": reached,
        "confidence": confidence,
        "units": units,
        "held": held,
        "method": method,
        "assumptions": [
            f"held-out {exchangeable}s and the next one are independent draws of one population",
            "nominal and weight were fixed without the held-out measurements",
            f"a {exchangeable} counts as held when all its measured responses are",
            "measured conditions only: the heads, temperatures and band of the certificate",
            f"{exchangeable}s excluded by hand are no part of the population",
        ],
        "sentence": sentence,
        "units_needed": needed,
    }


def _also(content: float, confidence: float, needed: dict[str, int]) -> str:
    if (content, confidence) in ((0.9, 0.9), (0.95, 0.95)):
        return ""
    return f", {needed['wanted']} for the {100 * content:g} % at {100 * confidence:g} % asked for"
