"""Units that were never built: drawn from the population, its own uncertainty drawn first."""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray
from identkit.methods.variance_uncertainty import drawn_correlation, drawn_variances
from identkit.plant_set.fields import FittedPlant
from identkit.stages.population_model import EffectLaw, PopulationModel


@dataclass(frozen=True)
class ParameterDraw:
    """One population that the measurements leave possible.

    Attributes
    ----------
    effects
        Fixed effects of every law, on its working scale.
    deviation
        (effects, 3) one sigma between units, between heads, and what is left.
    root
        (effects, effects) lower triangle: root @ root.T is the correlation of unit effects.
    """

    effects: tuple[FloatArray, ...]
    deviation: FloatArray
    root: FloatArray


def draw_parameters(
    model: PopulationModel, shrinkage: float, generator: np.random.Generator
) -> ParameterDraw:
    """Draw deviations, correlation, means and slopes within their estimation uncertainty.

    Parameters
    ----------
    model
        The population.
    shrinkage
        Intensity with which its correlation was shrunk.
    generator
        Source of the draw.
    """
    units = len(model.units)
    freedom = max(units - 1, 1)
    correlation, chi_square = drawn_correlation(
        model.correlation, freedom, 1.0 - shrinkage, generator
    )
    root = np.linalg.cholesky(correlation)
    deviation = np.sqrt(_drawn_components(model, chi_square, generator))
    shared = root @ generator.standard_normal(len(root))
    effects = tuple(
        _drawn_effects(law, float(deviation[k, 0]) ** 2 / units, float(shared[k]), generator)
        for k, law in enumerate(model.laws)
    )
    return ParameterDraw(effects, deviation, np.asarray(root, dtype=float))


def _drawn_components(
    model: PopulationModel, chi_square: FloatArray, generator: np.random.Generator
) -> FloatArray:
    """Return (effects, 3) variances, the finest drawn first."""
    estimate = np.array([law.deviation**2 for law in model.laws])
    measured = np.nan_to_num(np.array([law.fit_deviation**2 for law in model.laws]))
    responses, units = len(model.design.unit), len(model.units)
    groups = len(np.unique(model.design.head_in_unit))
    trends = len({column for law in model.laws for column in law.trend if column >= 0})
    result = np.zeros_like(estimate)

    def some(freedom: int) -> FloatArray:
        return np.asarray(generator.chisquare(max(freedom, 1), len(estimate)), dtype=float)

    left = responses - groups - trends
    result[:, 2] = drawn_variances(estimate[:, 2], measured, left, some(left))
    below = (result[:, 2] + measured) * groups / responses
    within = groups - units - (len(model.design.heads) - 1)
    result[:, 1] = drawn_variances(estimate[:, 1], below, within, some(within))
    below = (result[:, 1] + below) * units / groups
    result[:, 0] = drawn_variances(estimate[:, 0], below, units - 1, chi_square)
    return np.where(estimate.sum(axis=1, keepdims=True) > 0.0, result, 0.0)


def _drawn_effects(
    law: EffectLaw, shared_variance: float, shared: float, generator: np.random.Generator
) -> FloatArray:
    """Return fixed effects: what the units have in common moves all heads together."""
    covariance = law.means.covariance
    heads = np.zeros(len(covariance))
    heads[np.unique(law.columns[law.columns >= 0])] = 1.0
    counted = law.deviation[0] ** 2 / len(law.means.without_unit)
    rest = covariance - counted * np.outer(heads, heads)
    values, axes = np.linalg.eigh(rest)
    own = axes @ (np.sqrt(np.maximum(values, 0.0)) * generator.standard_normal(len(values)))
    return np.asarray(law.means.effects + own + np.sqrt(shared_variance) * shared * heads)


def draw_plants(
    model: PopulationModel, drawn: ParameterDraw, units: int, generator: np.random.Generator
) -> list[FittedPlant]:
    """Draw units of one possible population, each at every measured condition.

    Parameters
    ----------
    model
        The population.
    drawn
        As `draw_parameters` returned it.
    units
        How many.
    generator
        Source of the draws.

    Returns
    -------
    list of FittedPlant
        Unit by unit, the conditions of a unit in a row. Noise of measurement is not in them.
    """
    normal = generator.standard_normal((units, len(model.laws)))
    unit_effect = (normal @ drawn.root.T) * drawn.deviation[:, 0]
    values = {
        law.name: _values(model, law, drawn, k, unit_effect[:, k], generator)
        for k, law in enumerate(model.laws)
    }
    return [_plant(model, values, u, c) for u in range(units) for c in range(len(model.head))]


def _values(
    model: PopulationModel,
    law: EffectLaw,
    drawn: ParameterDraw,
    k: int,
    unit_effect: FloatArray,
    generator: np.random.Generator,
) -> FloatArray:
    """Return (units, conditions) values of one quantity in natural units."""
    effects = drawn.effects[k]
    # A head without a mean of its own (its mode was never found) takes that of the others.
    column = np.where(law.columns >= 0, law.columns, law.columns.max(initial=0))
    fixed = effects[column[model.head]]
    for at, step in zip(law.trend, (model.temperature, model.position), strict=True):
        if at >= 0:
            fixed = fixed + effects[at] * step
    shape = (len(unit_effect), len(model.head))
    heads = generator.standard_normal((len(unit_effect), int(model.slot.max()) + 1))[:, model.slot]
    rest = generator.standard_normal(shape)
    working = fixed + unit_effect[:, None]
    working = working + drawn.deviation[k, 1] * heads + drawn.deviation[k, 2] * rest
    return law.natural(working, model.head)


def _plant(
    model: PopulationModel, values: dict[str, FloatArray], unit: int, condition: int
) -> FittedPlant:
    def of_modes(name: str) -> FloatArray:
        return np.array([values[f"{mode}:{name}"][unit, condition] for mode in model.modes])

    def of_base(name: str) -> float:
        found = values.get(f"base:{name}")
        return 0.0 if found is None else float(found[unit, condition])

    def channel(name: str) -> FloatArray:
        return np.array([[of_base(name)]])

    residue = of_modes("residue").reshape(-1, 1, 1)
    return FittedPlant(
        response=f"virtual {unit + 1}, condition {condition + 1}",
        modal_frequency=of_modes("modal_frequency"),
        damping_ratio=of_modes("damping_ratio"),
        residue=residue,
        residue_rate=np.zeros_like(residue),
        base=model.base,
        base_gain=channel("base_gain"),
        base_frequency=of_base("base_frequency"),
        base_damping_ratio=of_base("base_damping_ratio"),
        base_residue=channel("base_residue"),
        feedthrough=channel("feedthrough"),
        delay=of_base("delay"),
    )
