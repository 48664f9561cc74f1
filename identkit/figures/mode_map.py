"""Each mode's frequency relative to its population value, against temperature."""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from identkit.figures.labels import Groups, groups_of, number_label, short_names
from identkit.figures.style import (
    ALARM,
    BANDS,
    INK,
    NOMINAL,
    PAPER,
    WIDE,
    Layout,
    clipped,
    frequency_label,
    group_style,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import FloatArray

INTERVAL_FACTOR = 1.96
"""Half-width of a 95 % interval in standard errors."""


@dataclass(frozen=True)
class ModeMap:
    """Relative modal frequencies against temperature.

    Attributes
    ----------
    modes
        Names of the modes.
    population_frequency
        (modes,) Hz at the reference temperature.
    deviation
        (responses, modes) percent from the population value; NaN where the mode is missing.
    half_interval
        (responses, modes) percent, half of the 95 % interval of the fit.
    temperature
        (responses,) degC; NaN where not stated.
    slope
        (modes,) percent per K.
    spread
        (modes,) percent, one sigma between plants at one temperature, fit error taken out.
    reference_temperature
        degC.
    groups
        Which responses share a colour.
    names
        Readable name of every response.
    """

    modes: tuple[str, ...]
    population_frequency: FloatArray
    deviation: FloatArray
    half_interval: FloatArray
    temperature: FloatArray
    slope: FloatArray
    spread: FloatArray
    reference_temperature: float
    groups: Groups
    names: tuple[str, ...]


def pick_mode_map(modes: xr.Dataset, population: xr.Dataset) -> ModeMap:
    """Pick every population mode's frequency, its interval, trend and spread.

    Parameters
    ----------
    modes, population
        As written by the pair and population stages.
    """
    chosen = [str(name) for name in population["mode"].values]
    paired = modes.sel(mode=chosen)
    value = population["population_value"].sel(quantity="modal_frequency").values
    of_frequency = population.sel(quantity="modal_frequency")
    variances = [
        of_frequency[name].values ** 2
        for name in ("unit_deviation", "head_deviation", "residual_deviation")
    ]
    return ModeMap(
        modes=tuple(chosen),
        population_frequency=value,
        deviation=100.0 * (paired["modal_frequency"].values / value - 1.0),
        half_interval=100.0
        * INTERVAL_FACTOR
        * paired["modal_frequency_standard_error"].values
        / value,
        temperature=number_label(modes, "temperature"),
        slope=100.0 * of_frequency["temperature_slope"].values,
        spread=100.0 * np.sqrt(np.nansum(variances, axis=0)),
        reference_temperature=float(population.attrs.get("reference_temperature", np.nan)),
        groups=groups_of(modes, "lot", "head", "unit"),
        names=tuple(str(name) for name in short_names(modes)),
    )


@in_house_style
def draw_mode_map(picked: ModeMap, layout: Layout = WIDE) -> Figure:
    """Draw one small panel per mode on one common scale, so that spreads compare by eye."""
    columns = min(layout.columns, max(len(picked.modes), 1))
    rows = -(-len(picked.modes) // columns)
    figure = new_figure(layout, 0.55 + (1.95 if layout.is_narrow else 2.15) * rows)
    panels = figure.subplots(rows, columns, sharex=True, sharey=True, squeeze=False)
    limit = _common_limit(picked.deviation)
    x, ticks = _abscissa(picked)
    for at, axes in enumerate(panels.flat):
        if at < len(picked.modes):
            _panel(axes, picked, at, x, limit)
        else:
            axes.set_axis_off()
    first = panels[0, 0]
    first.set_ylim(-limit, limit)
    first.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
    if ticks is not None:
        first.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
    figure.supxlabel(
        "temperature, °C" if ticks is not None else "responses in order", size="medium"
    )
    figure.supylabel("frequency relative to population, %", size="medium")
    _legend(figure, picked, layout)
    return figure


def _common_limit(deviation: FloatArray) -> float:
    """Return a scale that shows most points of every mode; the rest stand at the edge."""
    known = np.abs(deviation[np.isfinite(deviation)])
    if known.size == 0:
        return 1.0
    per_mode = [
        np.quantile(column[np.isfinite(column)], 0.94)
        for column in np.abs(deviation).T
        if np.isfinite(column).any()
    ]
    return float(min(max(per_mode) * 1.25, known.max() * 1.1) or 1.0)


def _abscissa(picked: ModeMap) -> tuple[FloatArray, FloatArray | None]:
    """Return where each response stands: its temperature, groups side by side within it."""
    known = np.isfinite(picked.temperature)
    if not known.any():
        return np.arange(picked.temperature.size, dtype=float), None
    ticks = np.unique(picked.temperature[known])
    step = float(np.diff(ticks).min()) if ticks.size > 1 else 1.0
    count = len(picked.groups.values)
    offset = (picked.groups.member - (count - 1) / 2.0) * 0.7 * step / max(count, 2)
    return np.where(known, picked.temperature, ticks[0] - step) + offset, ticks


def _panel(axes: Axes, picked: ModeMap, at: int, x: FloatArray, limit: float) -> None:
    _trend(axes, picked, at, x)
    deviation, half = picked.deviation[:, at], picked.half_interval[:, at]
    inside = np.isfinite(deviation) & (np.abs(deviation) <= limit)
    for group in range(len(picked.groups.values)):
        colour, marker = group_style(group)
        chosen = inside & (picked.groups.member == group)
        axes.vlines(
            x[chosen],
            (deviation - half)[chosen],
            (deviation + half)[chosen],
            color=colour,
            lw=0.7,
            alpha=0.55,
            rasterized=True,
        )
        axes.plot(
            x[chosen],
            deviation[chosen],
            marker,
            color=colour,
            ms=2.6,
            mec="none",
            alpha=0.75,
            rasterized=True,
        )
    _beyond(axes, picked, at, x, limit)
    place = frequency_label(float(picked.population_frequency[at]))
    axes.set_title(f"{clipped(picked.modes[at], 8)}  {place}")


def _trend(axes: Axes, picked: ModeMap, at: int, x: FloatArray) -> None:
    ends = np.array([x.min(), x.max()])
    reach = np.ptp(ends) * 0.06 or 1.0
    ends = ends + [-reach, reach]
    line = np.zeros(2)
    if np.isfinite(picked.temperature).any() and np.isfinite(picked.slope[at]):
        line = picked.slope[at] * (ends - picked.reference_temperature)
    band = 2.0 * picked.spread[at]
    axes.fill_between(ends, line - band, line + band, color=BANDS[0], lw=0)
    axes.plot(ends, line, color=NOMINAL, lw=1.0)
    axes.set_xlim(ends[0], ends[1])


def _beyond(axes: Axes, picked: ModeMap, at: int, x: FloatArray, limit: float) -> None:
    """Mark points beyond the scale at its edge and say how far they lie and whose they are."""
    deviation = picked.deviation[:, at]
    for sign, marker in ((1.0, "^"), (-1.0, "v")):
        chosen = np.isfinite(deviation) & (sign * deviation > limit)
        if not chosen.any():
            continue
        axes.plot(x[chosen], np.full(chosen.sum(), sign * limit * 0.96), marker, color=ALARM, ms=4)
        owners = sorted(
            {name.split(",")[0] for name, hit in zip(picked.names, chosen, strict=True) if hit}
        )
        farthest = deviation[chosen][np.abs(deviation[chosen]).argmax()]
        whose = clipped(owners[0], 12) if len(owners) == 1 else f"{len(owners)} units"
        axes.annotate(
            f"{whose}: {farthest:+.1f} %",
            (0.5, 0.90 if sign > 0 else 0.06),
            xycoords="axes fraction",
            ha="center",
            color=ALARM,
            size="small",
            bbox={"facecolor": PAPER, "edgecolor": "none", "alpha": 0.85, "pad": 0.8},
        )


def _legend(figure: Figure, picked: ModeMap, layout: Layout) -> None:
    handles = [
        Line2D(
            [],
            [],
            color=colour,
            marker=marker,
            ls="none",
            ms=5,
            label=clipped(f"{picked.groups.name} {value}".strip()),
        )
        for value, (colour, marker) in (
            (value, group_style(at)) for at, value in enumerate(picked.groups.values)
        )
    ]
    handles.append(
        Line2D([], [], color=NOMINAL, lw=1.2, label="population trend, ±2σ between plants")
    )
    figure.legend(
        handles=handles,
        loc="outside upper left",
        ncols=2 if layout.is_narrow else min(len(handles), 6),
        labelcolor=INK,
    )
