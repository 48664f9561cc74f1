"""Coverage: what may be said about the next unit, and what may not.

Three statements, never mixed. Units kept out of nominal and bound give an exact, distribution-free
one (Wilks 1941, methods/tolerance_limits.py). Leaving each unit out in turn is an estimate
(stages/leave_one_out.py). Virtual units of the population model (stages/model_coverage.py) give one
that stands on assumptions, and only where the measurements do not speak against them.
"""

from collections.abc import Collection, Mapping, Sequence

import xarray as xr

from identkit.errors import InputError, Problem
from identkit.methods.tolerance_limits import (
    binomial_lower_limit,
    tolerance_content,
    tolerance_sample_size,
)
from identkit.plant_set.fields import FittedPlant, PlantSetFields
from identkit.stages.leave_one_out import LeaveOneOut, leave_one_unit_out
from identkit.stages.model_coverage import FEWEST_UNITS, ModelStatement, model_statement
from identkit.stages.model_coverage import METHOD as MODEL_METHOD
from identkit.stages.population_model import population_model

CAUTION = "This figure is no safety certificate."


def state_coverage(
    largest_reach: Mapping[str, float] | None = None,
    *,
    content: float = 0.9,
    confidence: float = 0.9,
    exchangeable: str = "unit",
    rejected: Sequence[str] = (),
    left_out: LeaveOneOut | None = None,
    model: ModelStatement | None = None,
) -> dict[str, object]:
    """State the share of future units that the set holds: exact, by leaving out, by a model.

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
    left_out
        Reach of every unit from the set of the others.
    model
        What virtual units say; it is about units, so it is not used where lots are drawn.

    Returns
    -------
    dict
        ``content`` (share reached; None where nothing is claimed), ``confidence``, ``units``,
        ``held``, ``method``, ``assumptions`` (list), ``sentence``, ``units_needed``: the exact
        statement where units were held out, else the model's where its checks pass, else none.
        ``exact``, ``leave_one_out``, ``model_based``: each statement on its own, or None.

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
    if exchangeable != "unit":
        left_out = model = None
    reach = dict(largest_reach or {})
    reach.update({name: float("inf") for name in rejected})
    exact = _claim(reach, content, confidence, exchangeable, needed) if reach else None
    tried = _tried(left_out) if left_out is not None else None
    predicted = _predicted(model, content, confidence) if model is not None else None
    if exact is not None:
        chosen = exact
    elif predicted is not None and predicted["trusted"]:
        chosen = predicted
    else:
        chosen = _no_claim(content, confidence, exchangeable, needed)
    fields = ("content", "confidence", "units", "held", "method", "assumptions")
    said = [part["sentence"] for part in (chosen, tried) if part is not None]
    if predicted is not None and chosen is not predicted:
        said.append(predicted["sentence"])
    return {
        **{name: chosen[name] for name in fields},
        "sentence": " ".join([*map(str, said), CAUTION]),
        "units_needed": needed,
        "exact": exact,
        "leave_one_out": tried,
        "model_based": predicted,
    }


def cover(
    draft: PlantSetFields,
    modes: xr.Dataset,
    population: xr.Dataset,
    nominal: xr.Dataset,
    bound: xr.Dataset,
    *,
    held_out: Mapping[str, str],
    left_out: Collection[str],
    content: float = 0.9,
    confidence: float = 0.9,
    exchangeable: str = "unit",
    radius_floor: float = 0.02,
    seed: int = 1,
) -> dict[str, object]:
    """Return all that can be said of the next unit, from the datasets of the stages.

    Parameters
    ----------
    draft
        The set.
    modes, population, nominal, bound
        As the stages wrote them.
    held_out
        Unit (or lot) by response id of what was held out.
    left_out
        Every response that population, nominal and bound did not see, the held-out ones included.
    content, confidence, exchangeable
        As in `state_coverage`.
    radius_floor
        As the bound had it.
    seed
        Of the draws.

    Returns
    -------
    dict
        As `state_coverage` returns it.
    """
    groups = largest_reach_by_group(draft.plants, held_out)
    tried = predicted = None
    if exchangeable == "unit" and _is_covered(draft):
        model = population_model(modes, population, leave_out=left_out)
        if len(model.units) >= FEWEST_UNITS:
            tried = leave_one_unit_out(
                modes, nominal, bound, model, radius_floor=radius_floor, seed=seed
            )
            predicted = model_statement(
                draft, model, population, modes, left_out_reach=tried.reach, seed=seed
            )
    return state_coverage(
        groups,
        content=content,
        confidence=confidence,
        exchangeable=exchangeable,
        left_out=tried,
        model=predicted,
    )


def _is_covered(draft: PlantSetFields) -> bool:
    """Whether leaving out and virtual units know this kind of set."""
    return draft.form == "multiplicative" and draft.is_scalar and draft.time.period <= 0.0


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
        f"{needed['95/95']} for 95 % at 95 %{_also(content, confidence, needed)}."
    )
    return {
        "content": None,
        "confidence": confidence,
        "units": 0,
        "held": 0,
        "method": "none: no units held out",
        "assumptions": [],
        "sentence": sentence,
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
        f"{verdict} ({needed['wanted']} held-out {exchangeable}s, all held, are needed)."
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
            f"{exchangeable}s left out by screening or by hand are no part of the population",
        ],
        "sentence": sentence,
    }


def _also(content: float, confidence: float, needed: dict[str, int]) -> str:
    if (content, confidence) in ((0.9, 0.9), (0.95, 0.95)):
        return ""
    return f", {needed['wanted']} for the {100 * content:g} % at {100 * confidence:g} % asked for"


def _tried(left_out: LeaveOneOut) -> dict[str, object]:
    """Return what leaving each unit out says."""
    tried = len(left_out.reach)
    held = sum(1 for value in left_out.reach.values() if value <= 1.0)
    which = "each unit" if tried == left_out.units else f"each of {tried} units drawn"
    assumptions = [
        "approximate: every unit is judged by another set, made of the others",
        "weight refitted on the points of the bound to the radius of the others, same order",
        "nominal made without the unit, at the population's own variances"
        if left_out.nominal_refitted
        else "the nominal was searched with the unit and is kept",
    ]
    return {
        "content": held / tried,
        "confidence": None,
        "units": tried,
        "held": held,
        "method": "leave one unit out (Stone 1974), approximate",
        "assumptions": assumptions,
        "sentence": f"Leaving {which} out in turn, {held} of {tried} would have been held "
        "(approximate: each time by another set).",
        "reach": dict(left_out.reach),
        "relief_db": dict(left_out.relief_db),
    }


def _predicted(model: ModelStatement, content: float, confidence: float) -> dict[str, object]:
    """Return what virtual units say, and whether it may be believed."""
    reached = model.shares.quantile(1.0 - confidence)
    failed = [check for check in model.checks if not check.passed]
    if failed:
        reasons = "; ".join(f"that {check.name} ({check.finding})" for check in failed)
        sentence = (
            f"The population model would say at least {100 * reached:.1f} % of all units, but that "
            f"must not be trusted: the measurements speak against the assumption {reasons}."
        )
    else:
        verdict = "reached" if reached >= content else "not reached"
        sentence = (
            f"If the population is as modelled, the set holds at least {100 * reached:.1f} % of "
            f"all units with {100 * confidence:g} % confidence ({100 * model.shares.mean:.1f} % "
            f"expected; {model.virtual_units} virtual units from a model of {model.units}); the "
            f"{100 * content:g} % asked for is {verdict}."
        )
    return {
        "content": reached,
        "confidence": confidence,
        "units": model.units,
        "held": 0,
        "method": f"{MODEL_METHOD} ({model.virtual_units} virtual units)",
        "assumptions": _model_assumptions(model),
        "sentence": sentence,
        "expected": model.shares.mean,
        "virtual_units": model.virtual_units,
        "trusted": model.trusted,
        "checks": [
            {"assumption": check.name, "passed": check.passed, "finding": check.finding}
            for check in model.checks
        ],
    }


def _model_assumptions(model: ModelStatement) -> list[str]:
    return [
        "units are independent draws of one population, the next one too",
        "unit effects on log frequency, log damping ratio and relative residue are normal, with "
        "the correlation estimated from the units and shrunk",
        "effects of heads within units, and what is left, are normal and independent of each other",
        "the trend over temperature is linear",
        f"a unit counts as held when its plants at all {model.conditions} measured conditions are",
        "every unit has the population's modes and no others",
        "units left out by screening or by hand are no part of the population",
    ]
