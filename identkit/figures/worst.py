"""A ledger of reach by unit: who comes closest to the edge of the set, and where."""

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from identkit.figures.labels import condition_of, natural_key, nearest_mode, units_of
from identkit.figures.set_plants import labelled
from identkit.figures.style import (
    ALARM,
    BANDS,
    INK,
    NOMINAL,
    RULE,
    SOFT_INK,
    WEIGHT,
    WIDE,
    Layout,
    frequency_label,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import FloatArray
from identkit.plant_set.fields import PlantSetFields

MOST_ROWS = 40


@dataclass(frozen=True)
class WorstLedger:
    """Units by their largest reach, worst first.

    Attributes
    ----------
    units
        Names.
    largest
        (units,) largest reach of the unit.
    all_reaches
        Per unit, the reach of each of its responses.
    condition
        Head, temperature and position of the response with the largest reach.
    frequency
        (units,) Hz, where it is attained.
    mode
        Name of the nearest mode, "" where none is near.
    """

    units: tuple[str, ...]
    largest: FloatArray
    all_reaches: tuple[FloatArray, ...]
    condition: tuple[str, ...]
    frequency: FloatArray
    mode: tuple[str, ...]


def pick_worst(
    contents: PlantSetFields,
    *,
    mode_names: tuple[str, ...] = (),
    mode_frequency: FloatArray | None = None,
) -> WorstLedger:
    """Pick the largest reach of every unit of a set, and where it is attained.

    Parameters
    ----------
    contents
        The set with all its plants.
    mode_names, mode_frequency
        Population modes and their frequencies in Hz, to name the nearest.
    """
    data = labelled(contents.plants)
    reach, units = data["reach"].values, units_of(data)
    condition, frequency = condition_of(data), data["reach_frequency"].values
    members = [np.flatnonzero(units == unit) for unit in dict.fromkeys(units.tolist())]
    members.sort(key=lambda rows: (-reach[rows].max(), natural_key(str(units[rows[0]]))))
    tops = [int(rows[reach[rows].argmax()]) for rows in members]
    modes = np.zeros(0) if mode_frequency is None else mode_frequency
    return WorstLedger(
        units=tuple(str(units[top]) for top in tops),
        largest=reach[tops],
        all_reaches=tuple(reach[rows] for rows in members),
        condition=tuple(str(condition[top]) for top in tops),
        frequency=frequency[tops],
        mode=tuple(nearest_mode(float(frequency[t]), list(mode_names), modes) for t in tops),
    )


@in_house_style
def draw_worst(picked: WorstLedger, layout: Layout = WIDE) -> Figure:
    """Draw one row per unit: a tick per response, a dot for the largest, its place in words."""
    rows = min(len(picked.units), MOST_ROWS)
    figure = new_figure(layout, 0.9 + 0.215 * max(rows, 2))
    ratios = (5, 6) if layout.is_narrow else (7, 3)
    marks, words = figure.subplots(1, 2, width_ratios=ratios, sharey=True)
    for row in range(rows):
        _row(marks, picked, row)
    _words(words, picked, rows, layout)
    marks.axvline(1.0, color=WEIGHT, lw=1.3)
    marks.set_xlim(0.0, max(1.06, 1.04 * float(picked.largest.max(initial=0.0))))
    marks.set_ylim(rows - 0.4, -0.6)
    marks.set_yticks(range(rows), picked.units[:rows])
    marks.tick_params(axis="y", length=0)
    marks.grid(axis="y", visible=False)
    marks.spines["left"].set_visible(False)
    marks.set_xlabel("reach")
    hidden = len(picked.units) - rows
    if hidden:
        marks.set_title(f"{rows} units with the largest reach, of {len(picked.units)}")
    return figure


def _row(axes: Axes, picked: WorstLedger, row: int) -> None:
    largest = float(picked.largest[row])
    colour = ALARM if largest > 1.0 + 1e-6 else NOMINAL
    axes.hlines(row, 0.0, largest, color=RULE, lw=0.8, zorder=1)
    axes.plot(
        picked.all_reaches[row],
        np.full(picked.all_reaches[row].size, row),
        "|",
        color=BANDS[2],
        ms=6,
        mew=1.0,
        zorder=2,
    )
    axes.plot([largest], [row], "o", color=colour, ms=5.2, zorder=3)


def _words(axes: Axes, picked: WorstLedger, rows: int, layout: Layout) -> None:
    axes.set_axis_off()
    for row in range(rows):
        colour = ALARM if picked.largest[row] > 1.0 + 1e-6 else INK
        axes.text(
            0.0,
            row,
            f"{picked.largest[row]:.3f}",
            va="center",
            color=colour,
            fontweight="bold",
            size="small",
        )
        axes.text(
            0.24 if layout.is_narrow else 0.19,
            row,
            _place(picked, row, layout),
            va="center",
            color=SOFT_INK,
            size="x-small" if layout.is_narrow else "small",
        )
    axes.set_xlim(0.0, 1.0)


def _place(picked: WorstLedger, row: int, layout: Layout) -> str:
    condition = picked.condition[row]
    if layout.is_narrow:
        condition = condition.replace("head ", "h").replace(",", "")
    parts = [condition, frequency_label(float(picked.frequency[row])), picked.mode[row]]
    return (" " if layout.is_narrow else " · ").join(part for part in parts if part)
