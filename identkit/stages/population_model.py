"""The population as a law that units can be drawn from: means, trends, spreads, correlation.

Made from the paired modes and the deviations that `describe_population` estimated; means and trends
are solved again at those deviations, so that every unit can also be left out.
"""

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.methods.arrays import FloatArray, IntArray
from identkit.methods.case_deletion import NestedMeans, nested_means
from identkit.stages.population import counted_modes
from identkit.stages.population_design import Design, Regressors, campaign_design, regressors
from identkit.stages.population_quantity import (
    Quantity,
    base_quantities,
    mode_quantities,
    working_scale,
)

DEVIATIONS = ("unit_deviation", "head_deviation", "residual_deviation")


@dataclass(frozen=True)
class EffectLaw:
    """One quantity: a frequency, damping ratio or residue of a mode, or a part of the base.

    Attributes
    ----------
    name
        Mode (or "base") and quantity.
    logarithmic
        Whether the working scale is the logarithm; else the value over `scale` of its head.
    scale
        (heads,) signed typical size; ones on a logarithmic scale.
    means
        Fixed effects on the working scale, with and without each unit.
    columns
        (heads,) column of each head's mean; the temperature's and the position's stand in `trend`.
    trend
        Columns of temperature and position, -1 where there is none.
    deviation
        (3,) one sigma between units, heads within units, and what is left.
    fit_deviation
        One sigma of the measurement of a typical response.
    """

    name: str
    logarithmic: bool
    scale: FloatArray
    means: NestedMeans
    columns: IntArray
    trend: tuple[int, int]
    deviation: FloatArray
    fit_deviation: float

    def natural(self, working: FloatArray, head: IntArray) -> FloatArray:
        """Return values in natural units of working values (..., conditions) of some heads."""
        return np.asarray(np.exp(working) if self.logarithmic else working * self.scale[head])

    def without(self, unit: int) -> float:
        """Return the mean over heads at the reference, without one unit, natural units."""
        seen = np.flatnonzero(self.columns >= 0)
        effect = self.means.without_unit[unit][self.columns[seen]]
        if self.logarithmic:
            return float(np.exp(effect.mean()))
        return float((self.scale[seen] * effect).mean())


@dataclass(frozen=True)
class PopulationModel:
    """What virtual units are drawn from.

    Attributes
    ----------
    laws
        One per quantity, in the order of the correlation.
    correlation
        (effects, effects) of unit effects.
    unit_effect
        (units, effects) predicted, relative.
    units, responses
        Names of the units, and of the responses in the order of the design.
    design
        Labels of the responses behind it.
    modes
        Names of the population's modes.
    base
        "free", "pivot" or "none".
    head, temperature, position
        (conditions,) what a unit is measured at: head index, differences from the reference.
    slot
        (conditions,) which head of the unit that is; the head index where heads have names that
        units share, else a running number.
    """

    laws: tuple[EffectLaw, ...]
    correlation: FloatArray
    unit_effect: FloatArray
    units: tuple[str, ...]
    responses: tuple[str, ...]
    design: Design
    modes: tuple[str, ...]
    base: str
    head: IntArray
    temperature: FloatArray
    position: FloatArray
    slot: IntArray


def population_model(
    modes: xr.Dataset, population: xr.Dataset, *, leave_out: Collection[str] = ()
) -> PopulationModel:
    """Return the law of the population that `describe_population` described.

    Parameters
    ----------
    modes
        Paired modes.
    population
        As `describe_population` wrote it, from the same modes.
    leave_out
        The responses it did not count.
    """
    kept = ~np.isin(modes["response"].values.astype(str), list(leave_out))
    inside = modes["mode_in_population"].values.astype(bool)
    modes = modes.isel(response=np.flatnonzero(kept), mode=np.flatnonzero(inside))
    design = campaign_design(modes, float(population.attrs["reference_temperature"]))
    usable = counted_modes(modes)
    laws = [
        _law(f"{name}:{quantity.name}", quantity, design, population.sel(mode=name), "")
        for m, name in enumerate(modes["mode"].values.astype(str))
        for quantity in mode_quantities(modes, m, usable[:, m])
    ]
    laws += [
        _law(f"base:{quantity.name}", quantity, design, population, "base_")
        for quantity in base_quantities(modes)
    ]
    head, temperature, position, slot = _conditions(design)
    names = [law.name for law in laws]
    chosen = population.sel(effect=names, effect_other=names)
    return PopulationModel(
        tuple(laws),
        np.asarray(chosen["unit_effect_correlation"].values, dtype=float),
        np.asarray(chosen["unit_effect"].transpose("unit", "effect").values, dtype=float),
        design.units,
        tuple(modes["response"].values.astype(str).tolist()),
        design,
        tuple(modes["mode"].values.astype(str).tolist()),
        str(population.attrs["base"]),
        head.astype(np.int64),
        temperature,
        position,
        slot.astype(np.int64),
    )


def _conditions(design: Design) -> FloatArray:
    """Return (4, conditions): head, temperature, position, and which head of its unit it is."""
    none = np.zeros(len(design.unit))
    temperature = none if design.temperature is None else design.temperature
    position = none if design.position is None else design.position
    found = np.unique(np.stack([design.head.astype(float), temperature, position]), axis=1)
    if len(design.heads) > 1:
        return np.vstack([found, found[0]])
    # Heads without shared names: every unit has as many as it has on average.
    groups = len(np.unique(design.head_in_unit))
    slots = np.arange(max(1, round(groups / len(design.units))), dtype=float)
    return np.vstack([np.tile(found, slots.size), np.repeat(slots, found.shape[1])])


def _law(
    name: str, quantity: Quantity, design: Design, described: xr.Dataset, prefix: str
) -> EffectLaw:
    rows = quantity.rows & np.isfinite(quantity.value)
    dim = "base_quantity" if prefix else "quantity"
    described = described.sel({dim: quantity.name})
    deviation = np.array([float(described[f"{prefix}{each}"]) for each in DEVIATIONS])
    deviation = np.nan_to_num(deviation)
    if rows.sum() < 2:
        return _known_once(name, quantity, design, rows, deviation)
    scale = working_scale(quantity, design, rows)
    value, error = quantity.value[rows], quantity.error[rows]
    known = np.isfinite(error)
    error = np.where(known, error, np.median(error[known]) if known.any() else 0.0)
    own = scale[design.head[rows]]
    working = np.log(value) if quantity.logarithmic else value / own
    relative = error / np.abs(value if quantity.logarithmic else own)
    fixed = regressors(design, rows)
    means = nested_means(
        working,
        fixed.matrix,
        design.unit[rows],
        design.head_in_unit[rows],
        relative**2,
        deviation**2,
    )
    means = _for_every_unit(means, len(design.units))
    return EffectLaw(
        name,
        quantity.logarithmic,
        scale,
        means,
        _columns(fixed, len(design.heads)),
        (fixed.temperature, fixed.position),
        deviation,
        # One response that says next to nothing must not speak for the others: no mean square.
        float(np.median(relative)),
    )


def _for_every_unit(means: NestedMeans, units: int) -> NestedMeans:
    """Append units that show nothing of this quantity: without them nothing changes."""
    rest = np.tile(means.effects, (units - len(means.without_unit), 1))
    return NestedMeans(means.effects, means.covariance, np.vstack([means.without_unit, rest]))


def _columns(fixed: Regressors, heads: int) -> IntArray:
    columns = np.full(heads, -1, dtype=np.int64)
    columns[fixed.heads] = fixed.head_columns
    return columns


def _known_once(
    name: str, quantity: Quantity, design: Design, rows: np.ndarray, deviation: FloatArray
) -> EffectLaw:
    """Return the law of a quantity seen once or never: its value, and no spread."""
    value = float(quantity.value[rows][0]) if rows.any() else float("nan")
    working = np.log(value) if quantity.logarithmic else 1.0
    heads = len(design.heads)
    means = _for_every_unit(
        NestedMeans(np.array([working]), np.zeros((1, 1)), np.zeros((0, 1))), len(design.units)
    )
    scale = np.ones(heads) if quantity.logarithmic else np.full(heads, value)
    columns = np.zeros(heads, dtype=np.int64)
    return EffectLaw(
        name, quantity.logarithmic, scale, means, columns, (-1, -1), deviation, float("nan")
    )
