"""Population: mean, trend and spread of every modal parameter, measurement noise taken out.

Each quantity is fitted with nested variance components by restricted maximum likelihood
(methods/variance_components.py), the variance of every single fit known and not counted as
spread. Frequencies and damping ratios are on a logarithmic scale; residues are signed, relative
to the typical residue of their head.
"""

from collections.abc import Collection

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.errors import InputError, Problem
from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.correlation_shrinkage import shrunk_correlation
from identkit.methods.group_contrast import group_contrast
from identkit.outcomes import Outcome
from identkit.stages.population_design import Design, campaign_design
from identkit.stages.population_quantity import (
    STATISTICS,
    QuantitySummary,
    base_quantities,
    mode_quantities,
    mode_quantity_names,
    summarise,
)
from identkit.stages.response_labels import text_label

_KEPT_OUT = (Outcome.MODE_SHIFTED, Outcome.MODE_OUT_OF_BAND)


def describe_population(
    modes: xr.Dataset,
    *,
    reference_temperature: float = 25.0,
    leave_out: Collection[str] = (),
) -> xr.Dataset:
    """Describe the population mode by mode (restricted likelihood, Patterson, Thompson 1971).

    Parameters
    ----------
    modes
        Paired modes.
    reference_temperature
        degC at which values are stated.
    leave_out
        Names of responses that shall not count.

    Returns
    -------
    Dataset
        Dims mode (population modes), quantity, head: ``population_value``,
        ``temperature_slope``, ``position_slope``, their standard errors, ``unit_deviation``,
        ``head_deviation``, ``residual_deviation``, ``fit_deviation``, ``head_value``,
        ``responses_found`` / ``_missing`` / ``_shifted``; the base, feedthrough and delay as
        scalars and along ``base_quantity``; unit effects and their correlation along ``effect``.
        NaN deviation: the labels cannot tell it. ``attrs["notes"]`` says why.

    Raises
    ------
    InputError
        If no response is left.

    Notes
    -----
    There may be no mode at all: the base, the feedthrough and the delay are a plant too.
    Modes that stand far off the population (MODE_SHIFTED) and modes outside the band do not
    count, unless fewer than two others are left; a deviation is that of the units in step.
    Unit effects are best linear unbiased predictions; their correlation is shrunk (Schaefer,
    Strimmer 2005) and is meant for drawing virtual units: effect = deviation x correlated
    standard normal.
    """
    kept = ~np.isin(modes["response"].values.astype(str), list(leave_out))
    population = modes["mode_in_population"].values.astype(bool)
    if not kept.any():
        found = f"none left of {len(kept)} responses"
        raise InputError(Problem("modes", found, "at least one response"))
    modes = modes.isel(response=np.flatnonzero(kept), mode=np.flatnonzero(population))
    design = campaign_design(modes, reference_temperature)
    usable = counted_modes(modes)
    per_mode = [
        [summarise(q, design) for q in mode_quantities(modes, m, usable[:, m])]
        for m in range(modes.sizes["mode"])
    ]
    base = [summarise(q, design) for q in base_quantities(modes)]
    result = xr.merge(
        [
            _mode_part(modes, design, per_mode),
            _base_part(base),
            _effect_part(modes, design, per_mode, base),
        ],
        combine_attrs="drop",
    )
    result = result.assign(_counts(modes))
    result.attrs = {
        "reference_temperature": float(reference_temperature),
        "base": str(modes.attrs.get("base", "")),
        "responses": int(modes.sizes["response"]),
        "units": len(design.units),
        "notes": "; ".join(design.notes),
        "input_unit": str(modes.attrs.get("input_unit", "")),
        "output_unit": str(modes.attrs.get("output_unit", "")),
    }
    return result


def counted_modes(modes: xr.Dataset) -> BoolArray:
    """Return which modes count; all that were found where too few would be left."""
    found = np.isfinite(modes["modal_frequency"].transpose("response", "mode").values)
    outcome = modes["mode_outcome"].transpose("response", "mode").values
    in_step = found & ~np.isin(outcome, [int(code) for code in _KEPT_OUT])
    return np.asarray(np.where(in_step.sum(axis=0) >= 2, in_step, found), dtype=bool)


def _counts(modes: xr.Dataset) -> dict[str, tuple[str, IntArray]]:
    outcome = modes["mode_outcome"].transpose("response", "mode").values
    found = np.isfinite(modes["modal_frequency"].transpose("response", "mode").values)
    return {
        "responses_found": ("mode", found.sum(axis=0)),
        "responses_missing": ("mode", (~found).sum(axis=0)),
        "responses_shifted": ("mode", (outcome == Outcome.MODE_SHIFTED).sum(axis=0)),
    }


def _mode_part(
    modes: xr.Dataset, design: Design, per_mode: list[list[QuantitySummary]]
) -> xr.Dataset:
    names = mode_quantity_names(modes)
    dims = ("mode", "quantity")
    shape = (modes.sizes["mode"], len(names))
    every = [summary for row in per_mode for summary in row]
    variables = {
        statistic: (dims, np.array([s.statistics[statistic] for s in every]).reshape(shape))
        for statistic in STATISTICS
    }
    by_head = (*shape, len(design.heads))
    head = np.array([s.head_value for s in every]).reshape(by_head)
    head_error = np.array([s.head_value_standard_error for s in every]).reshape(by_head)
    return xr.Dataset(
        {
            **variables,
            "head_value": ((*dims, "head"), head),
            "head_value_standard_error": ((*dims, "head"), head_error),
        },
        coords={
            "mode": modes["mode"].values.astype(str),
            "quantity": names,
            "head": list(design.heads),
        },
    )


def _base_part(base: list[QuantitySummary]) -> xr.Dataset:
    variables: dict[str, object] = {
        f"base_{statistic}": ("base_quantity", np.array([s.statistics[statistic] for s in base]))
        for statistic in STATISTICS
    }
    for summary in base:
        variables[summary.name] = ((), summary.statistics["population_value"])
    return xr.Dataset(variables, coords={"base_quantity": [s.name for s in base]})


def _effect_part(
    modes: xr.Dataset,
    design: Design,
    per_mode: list[list[QuantitySummary]],
    base: list[QuantitySummary],
) -> xr.Dataset:
    names = [
        f"{name}:{summary.name}"
        for name, row in zip(modes["mode"].values, per_mode, strict=True)
        for summary in row
    ] + [f"base:{summary.name}" for summary in base]
    summaries = [summary for row in per_mode for summary in row] + base
    effects = np.stack([summary.unit_effect for summary in summaries], axis=1)
    correlation, intensity = shrunk_correlation(effects)
    part = xr.Dataset(
        {
            "unit_effect": (("unit", "effect"), effects),
            "unit_effect_deviation": (
                "effect",
                np.array([s.statistics["unit_deviation"] for s in summaries]),
            ),
            "unit_effect_correlation": (("effect", "effect_other"), correlation),
            "unit_effect_shrinkage": ((), intensity),
        },
        coords={"unit": list(design.units), "effect": names, "effect_other": names},
    )
    lot = text_label([modes], "lot")
    return part if lot is None else part.merge(_lot_part(lot, design, effects))


def _lot_part(lot: NDArray[np.str_], design: Design, effects: FloatArray) -> xr.Dataset:
    """Return each lot's mean unit effect and the chance that it is no different from the rest.

    A unit counts for the lot it was measured in.
    """
    lots = np.unique(lot)
    members: list[BoolArray] = [
        np.isin(np.arange(len(design.units)), design.unit[lot == name]) for name in lots
    ]
    means = np.stack([effects[mine].mean(axis=0) for mine in members])
    chance = group_contrast(effects, np.stack(members))
    return xr.Dataset(
        {
            "lot_effect": (("lot", "effect"), means),
            "lot_chance": (("lot", "effect"), chance),
        },
        coords={"lot": list(lots)},
    )
