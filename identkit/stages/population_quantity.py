"""One quantity of the population: its observations on a working scale, and their summary."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.robust_distance import median_and_scale
from identkit.methods.variance_components import VarianceComponents, restricted_likelihood_fit
from identkit.stages.mode_tables import CHANNEL_DIMS, channel_name, parameter_errors
from identkit.stages.population_design import Design, Regressors, regressors

STATISTICS = (
    "population_value",
    "population_value_standard_error",
    "temperature_slope",
    "temperature_slope_standard_error",
    "position_slope",
    "position_slope_standard_error",
    "unit_deviation",
    "unit_deviation_standard_error",
    "head_deviation",
    "head_deviation_standard_error",
    "residual_deviation",
    "residual_deviation_standard_error",
    "fit_deviation",
)
_LEAST_HEAD_SHARE = 0.25  # of the root mean square over heads; a smaller head is scaled by this


@dataclass(frozen=True)
class Quantity:
    """Observations of one quantity, in natural units.

    Attributes
    ----------
    name
        As in the dataset.
    value, error
        (responses,) natural units; NaN or a False in `rows` where there is none.
    rows
        (responses,) which responses count.
    logarithmic
        Whether the working scale is the logarithm; else relative to the typical size per head.
    """

    name: str
    value: FloatArray
    error: FloatArray
    rows: BoolArray
    logarithmic: bool


@dataclass(frozen=True)
class QuantitySummary:
    """What is known of one quantity.

    Attributes
    ----------
    name
        As in the dataset.
    statistics
        One number for every name of STATISTICS; deviations and slopes relative, values natural.
    head_value, head_value_standard_error
        (heads,) mean of every head at the reference, natural units.
    unit_effect
        (units,) predicted deviation of every unit, relative.
    """

    name: str
    statistics: dict[str, float]
    head_value: FloatArray
    head_value_standard_error: FloatArray
    unit_effect: FloatArray


def mode_quantity_names(modes: xr.Dataset) -> list[str]:
    """Return the names of what `mode_quantities` yields, also where there is no mode."""
    outputs, inputs = modes.sizes["output"], modes.sizes["input"]
    channels = [(o, i) for o in range(outputs) for i in range(inputs)]
    residues = [channel_name("residue", (outputs, inputs), o, i) for o, i in channels]
    return ["modal_frequency", "damping_ratio", *residues]


def mode_quantities(modes: xr.Dataset, mode: int, usable: BoolArray) -> Iterator[Quantity]:
    """Yield frequency, damping ratio and the residue of every channel of one mode."""
    one = modes.isel(mode=mode)
    for name in ("modal_frequency", "damping_ratio"):
        value, error = one[name].values, one[f"{name}_standard_error"].values
        yield Quantity(name, value, error, usable & (value > 0.0), logarithmic=True)
    dims = tuple(d for d in CHANNEL_DIMS if d != "mode")
    residue = one["residue"].transpose(*dims).values
    error = one["residue_standard_error"].transpose(*dims).values
    for o in range(residue.shape[1]):
        for i in range(residue.shape[2]):
            name = channel_name("residue", residue.shape[1:], o, i)
            yield Quantity(name, residue[:, o, i], error[:, o, i], usable, logarithmic=False)


def base_quantities(modes: xr.Dataset) -> Iterator[Quantity]:
    """Yield what the plant has beside its modes: base, feedthrough and delay."""
    everyone = np.ones(modes.sizes["response"], dtype=bool)
    logarithmic = {"base_frequency": True, "base_damping_ratio": True, "delay": False}
    for name, is_log in logarithmic.items():
        if name in modes:
            value = modes[name].values.astype(float)
            rows = everyone & (value > 0.0) if is_log else everyone
            yield Quantity(name, value, parameter_errors(modes, name), rows, is_log)
    for name in ("base_residue", "base_gain", "feedthrough"):
        if name not in modes:
            continue
        value = modes[name].transpose("response", "output", "input").values.astype(float)
        for o in range(value.shape[1]):
            for i in range(value.shape[2]):
                label = channel_name(name, value.shape[1:], o, i)
                error = parameter_errors(modes, label)
                yield Quantity(label, value[:, o, i], error, everyone, logarithmic=False)


def summarise(quantity: Quantity, design: Design) -> QuantitySummary:
    """Fit one quantity and state it in natural units with relative deviations."""
    rows = quantity.rows & np.isfinite(quantity.value)
    if rows.sum() < 2:
        return _single(quantity, design, rows)
    scale = working_scale(quantity, design, rows)
    value, error = quantity.value[rows], quantity.error[rows]
    known = np.isfinite(error)
    error = np.where(known, error, np.median(error[known]) if known.any() else 0.0)
    size = np.abs(value) if quantity.logarithmic else np.abs(scale[design.head[rows]])
    working = np.log(value) if quantity.logarithmic else value / scale[design.head[rows]]
    fixed = regressors(design, rows)
    fit = restricted_likelihood_fit(
        working, fixed.matrix, design.unit[rows], design.head_in_unit[rows], (error / size) ** 2
    )
    fit_deviation = float(np.sqrt(np.mean((error / size) ** 2)))
    return _natural(quantity, design, rows, scale, fixed, fit, fit_deviation)


def working_scale(quantity: Quantity, design: Design, rows: BoolArray) -> FloatArray:
    """Return (heads,) signed typical size of each head; ones on a logarithmic scale."""
    heads = len(design.heads)
    if quantity.logarithmic:
        return np.ones(heads)
    value, head = quantity.value[rows], design.head[rows]
    typical = np.array(
        [np.median(value[head == h]) if (head == h).any() else 0.0 for h in range(heads)]
    )
    spread = float(median_and_scale(value - typical[head])[1])
    least = max(
        _LEAST_HEAD_SHARE * float(np.sqrt(np.mean(typical**2))), spread, float(np.finfo(float).tiny)
    )
    sign = np.where(typical < 0.0, -1.0, 1.0)
    return np.asarray(sign * np.maximum(np.abs(typical), least))


def _natural(
    quantity: Quantity,
    design: Design,
    rows: BoolArray,
    scale: FloatArray,
    fixed: Regressors,
    fit: VarianceComponents,
    fit_deviation: float,
) -> QuantitySummary:
    heads, columns = fixed.heads, fixed.head_columns
    effect = fit.effects[columns]
    covariance = fit.effect_covariance[np.ix_(columns, columns)]
    if quantity.logarithmic:
        of_head = np.exp(effect)
        value = float(np.exp(effect.mean()))
        gradient = np.full(len(heads), value / len(heads))
        size = of_head
    else:
        of_head = scale[heads] * effect
        value = float(of_head.mean())
        gradient = scale[heads] / len(heads)
        size = np.abs(scale[heads])
    value_error = float(np.sqrt(gradient @ covariance @ gradient))
    unit_effect = np.zeros(len(design.units))
    unit_effect[np.unique(design.unit[rows])] = fit.unit_effect
    slopes = (*_slope(fit, fixed.temperature), *_slope(fit, fixed.position))
    numbers = (value, value_error, *slopes, *_deviations(fit), fit_deviation)
    return QuantitySummary(
        quantity.name,
        dict(zip(STATISTICS, numbers, strict=True)),
        _spread_out(of_head, heads, len(design.heads)),
        _spread_out(size * np.sqrt(np.diag(covariance)), heads, len(design.heads)),
        unit_effect,
    )


def _slope(fit: VarianceComponents, column: int) -> tuple[float, float]:
    if column < 0:
        return 0.0, float("nan")
    return float(fit.effects[column]), float(np.sqrt(fit.effect_covariance[column, column]))


def _deviations(fit: VarianceComponents) -> tuple[float, ...]:
    """Return standard deviation and its standard error, unit, head and residual in turn."""
    deviation = np.sqrt(fit.variance)
    error = np.full(3, np.nan)
    known = np.isfinite(fit.variance_standard_error) & (deviation > 0.0)
    error[known] = fit.variance_standard_error[known] / (2.0 * deviation[known])
    return tuple(float(x) for pair in zip(deviation, error, strict=True) for x in pair)


def _spread_out(values: FloatArray, places: IntArray, size: int) -> FloatArray:
    full = np.full(size, np.nan)
    full[places] = values
    return full


def _single(quantity: Quantity, design: Design, rows: BoolArray) -> QuantitySummary:
    """Return the one value there is, or NaN, with nothing said about spread."""
    nan = float("nan")
    value = float(quantity.value[rows][0]) if rows.any() else nan
    error = float(quantity.error[rows][0]) if rows.any() else nan
    numbers = (value, error, 0.0, nan, 0.0, nan, *(nan,) * 7)
    return QuantitySummary(
        quantity.name,
        dict(zip(STATISTICS, numbers, strict=True)),
        np.full(len(design.heads), value),
        np.full(len(design.heads), error),
        np.zeros(len(design.units)),
    )
