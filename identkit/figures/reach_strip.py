"""Reach by frequency as a heat strip with one row per response."""

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator

from identkit.figures.frequency_axis import frequency_ticks, mark_modes
from identkit.figures.labels import reading_order, units_of
from identkit.figures.set_plants import labelled, left_out, reach_along
from identkit.figures.style import (
    INK,
    PAPER,
    REACH_COLOURS,
    WEIGHT,
    WIDE,
    Layout,
    clipped,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import FloatArray, IntArray
from identkit.plant_set.fields import PlantSetFields

COLUMNS, MOST_ROWS, MOST_SEPARATED = 480, 720, 60


@dataclass(frozen=True)
class ReachStrip:
    """Reach of every response along frequency, rows in reading order.

    Attributes
    ----------
    edges
        (columns + 1,) Hz, evenly spaced in log frequency.
    reach
        (rows, columns) largest reach within each column; NaN where nothing is known.
    unit_starts
        (units,) first row of each unit.
    units
        Names of the units.
    used_rows
        Number of rows that count for the bound; those below were left out of it.
    responses
        Number of responses behind the rows.
    mode_names, mode_frequency
        Population modes, to read frequencies by.
    """

    edges: FloatArray
    reach: FloatArray
    unit_starts: IntArray
    units: tuple[str, ...]
    used_rows: int
    responses: int
    mode_names: tuple[str, ...]
    mode_frequency: FloatArray


def pick_reach_strip(
    contents: PlantSetFields,
    *,
    mode_names: tuple[str, ...] = (),
    mode_frequency: FloatArray | None = None,
) -> ReachStrip | None:
    """Pick the reach of every plant of a set, rows by unit, head and temperature.

    Plants left out of the bound come last.

    Parameters
    ----------
    contents
        The set with its plants; the file with all of them, not only those that set the bound.
    mode_names, mode_frequency
        Population modes and their frequencies in Hz.

    Returns
    -------
    ReachStrip or None
        None where reach is not one number per frequency, or the set carries no plant.
    """
    frequency = contents.radii.frequency
    reach = reach_along(contents, frequency) if contents.plants else None
    if reach is None:
        return None
    data = labelled(contents.plants)
    order, out = reading_order(data), left_out(contents)
    order = np.concatenate([order[~out[order]], order[out[order]]])
    edges, binned = binned_maximum(frequency, reach[order])
    rows, home = thinned_rows(binned)
    units, out = units_of(data)[order], out[order]
    changes = (units[1:] != units[:-1]) | (out[1:] != out[:-1])
    first = np.flatnonzero(np.append(True, changes))
    return ReachStrip(
        edges=edges,
        reach=rows,
        unit_starts=home[first],
        units=tuple(str(name) for name in units[first]),
        used_rows=int(home[~out].max(initial=-1)) + 1,
        responses=len(contents.plants),
        mode_names=mode_names,
        mode_frequency=np.zeros(0) if mode_frequency is None else mode_frequency,
    )


def binned_maximum(
    frequency: FloatArray, values: FloatArray, *, columns: int = COLUMNS
) -> tuple[FloatArray, FloatArray]:
    """Return log-spaced edges and the largest value within each column.

    A column takes the largest value, never a mean, so that no peak is lost; a column without a
    frequency of its own repeats the nearest one.

    Parameters
    ----------
    frequency
        (points,) Hz, increasing.
    values
        (rows, points).
    columns
        Largest number of columns.
    """
    count = min(columns, frequency.size)
    edges = np.geomspace(frequency[0], frequency[-1], count + 1)
    column = np.clip(np.searchsorted(edges, frequency, side="right") - 1, 0, count - 1)
    binned = np.full((values.shape[0], count), np.nan)
    for at in range(count):
        chosen = np.flatnonzero(column == at)
        if chosen.size == 0:
            centre = np.sqrt(edges[at] * edges[at + 1])
            chosen = np.array([np.abs(np.log(frequency / centre)).argmin()])
        binned[:, at] = np.fmax.reduce(values[:, chosen], axis=1)
    return edges, binned


def thinned_rows(values: FloatArray, *, most: int = MOST_ROWS) -> tuple[FloatArray, IntArray]:
    """Return at most `most` rows, neighbours merged by their largest value, and each row's home."""
    rows = values.shape[0]
    home = np.arange(rows) if rows <= most else np.arange(rows) * most // rows
    starts = np.flatnonzero(np.diff(home, prepend=-1))
    return np.fmax.reduceat(values, starts, axis=0), home


@in_house_style
def draw_reach_strip(picked: ReachStrip, layout: Layout = WIDE) -> Figure:
    """Draw the largest reach at every frequency above one coloured row per response."""
    rows = picked.reach.shape[0]
    figure = new_figure(layout, 1.9 + np.clip(rows * 0.021, 1.2, 6.6))
    top, strip = figure.subplots(
        2, 1, sharex=True, height_ratios=(1.0, float(np.clip(rows * 0.021, 1.2, 6.6)))
    )
    _largest(top, picked, layout)
    _strip(strip, picked, figure, layout)
    return figure


def _largest(axes: Axes, picked: ReachStrip, layout: Layout) -> None:
    largest = np.fmax.reduce(picked.reach[: picked.used_rows], axis=0)
    axes.stairs(largest, np.log10(picked.edges), color=INK, lw=0.9)
    axes.axhline(1.0, color=WEIGHT, lw=1.0)
    axes.set_ylim(0.0, max(1.15, 1.08 * float(np.nanmax(largest))))
    axes.set_ylabel("largest")
    band = (float(picked.edges[0]), float(picked.edges[-1]))
    mark_modes(axes, picked.mode_names, picked.mode_frequency, band, layout, in_logarithms=True)


def _strip(axes: Axes, picked: ReachStrip, figure: Figure, layout: Layout) -> None:
    left, right = np.log10(picked.edges[[0, -1]])
    rows = picked.reach.shape[0]
    image = axes.imshow(
        picked.reach,
        extent=(left, right, rows - 0.5, -0.5),
        aspect="auto",
        interpolation="none",
        cmap=REACH_COLOURS,
        norm=Normalize(0.0, 1.0 + 1e-6),
    )
    axes.grid(visible=False)
    separable = len(picked.units) <= MOST_SEPARATED
    for start in picked.unit_starts[1:] if separable else ():
        axes.axhline(start - 0.5, color=PAPER, lw=0.6)
    _unit_ticks(axes, picked)
    if picked.used_rows < rows:
        _left_out(axes, picked, rows)
    ticks = frequency_ticks(
        float(picked.edges[0]),
        float(picked.edges[-1]),
        steps=(1, 3) if layout.is_narrow else (1, 2, 5),
    )
    axes.xaxis.set_major_locator(FixedLocator(np.log10(ticks).tolist()))
    axes.set_xticklabels([f"{t / 1000:g}k" if t >= 1000 else f"{t:g}" for t in ticks])
    axes.set_xlim(left, right)
    axes.set_xlabel("frequency, Hz")
    bar = figure.colorbar(
        image, ax=axes, location="bottom", extend="max", shrink=0.6, aspect=40, pad=0.02
    )
    bar.set_label("reach: 1 touches the weight, beyond 1 is not held")
    bar.outline.set_visible(False)


def _left_out(axes: Axes, picked: ReachStrip, rows: int) -> None:
    """Set the rows of plants left out of the bound apart, and say so beside them."""
    axes.axhline(picked.used_rows - 0.5, color=INK, lw=1.2)
    axes.annotate(
        "left out of the bound",
        (0.004, 0.5 * (picked.used_rows + rows - 1)),
        xycoords=("axes fraction", "data"),
        va="center",
        size="small",
        bbox={"facecolor": PAPER, "edgecolor": "none", "alpha": 0.85, "pad": 1.5},
    )


def _unit_ticks(axes: Axes, picked: ReachStrip) -> None:
    ends = np.append(picked.unit_starts[1:], picked.reach.shape[0])
    middles = 0.5 * (picked.unit_starts + ends - 1)
    every = max(1, -(-len(picked.units) // 48))
    axes.set_yticks(middles[::every], [clipped(name, 10) for name in picked.units[::every]])
    axes.tick_params(
        axis="y", length=0, labelsize="small" if len(picked.units) <= 30 else "x-small"
    )
