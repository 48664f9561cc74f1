"""A ledger of reach by unit: who comes closest to the edge of the set, and where."""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from identkit.figures.labels import condition_of, natural_key, nearest_mode, units_of
from identkit.figures.set_plants import labelled, left_out
from identkit.figures.style import (
    ALARM,
    BANDS,
    INK,
    NOMINAL,
    PAPER,
    RULE,
    SOFT_INK,
    WEIGHT,
    WIDE,
    Layout,
    clipped,
    frequency_label,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import BoolArray, FloatArray
from identkit.plant_set.fields import PlantSetFields

MOST_ROWS, FARTHEST = 40, 1.25


@dataclass(frozen=True)
class WorstLedger:
    """Units by their largest reach, worst first; those left out of the bound come last.

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
    left_out
        (units,) whether these responses were left out of the bound.
    """

    units: tuple[str, ...]
    largest: FloatArray
    all_reaches: tuple[FloatArray, ...]
    condition: tuple[str, ...]
    frequency: FloatArray
    mode: tuple[str, ...]
    left_out: BoolArray


def pick_worst(
    contents: PlantSetFields | None,
    *,
    audit: xr.Dataset | None = None,
    mode_names: tuple[str, ...] = (),
    mode_frequency: FloatArray | None = None,
) -> WorstLedger | None:
    """Pick the largest reach of every unit, and where it is attained.

    Parameters
    ----------
    contents
        The set with all its plants; used where there is no audit.
    audit
        As written by the audit stage; it also knows the responses left out of the bound.
    mode_names, mode_frequency
        Population modes and their frequencies in Hz, to name the nearest.
    """
    data = _reaches(contents, audit)
    if data is None or not data.sizes["response"]:
        return None
    reach, units, out = data["reach"].values, units_of(data), data["left_out"].values
    condition, frequency = condition_of(data), data["reach_frequency"].values
    keys = list(dict.fromkeys(zip(out.tolist(), units.tolist(), strict=True)))
    members = {key: np.flatnonzero((out == key[0]) & (units == key[1])) for key in keys}
    keys.sort(key=lambda key: (key[0], -reach[members[key]].max(), natural_key(key[1])))
    tops = [int(members[key][reach[members[key]].argmax()]) for key in keys]
    modes = np.zeros(0) if mode_frequency is None else mode_frequency
    return WorstLedger(
        units=tuple(unit for _, unit in keys),
        largest=reach[tops],
        all_reaches=tuple(reach[members[key]] for key in keys),
        condition=tuple(str(condition[top]) for top in tops),
        frequency=frequency[tops],
        mode=tuple(nearest_mode(float(frequency[t]), list(mode_names), modes) for t in tops),
        left_out=np.array([key[0] for key in keys], dtype=bool),
    )


def _reaches(contents: PlantSetFields | None, audit: xr.Dataset | None) -> xr.Dataset | None:
    if audit is not None and "fit_reach" in audit:
        judged = audit.isel(response=~np.isnan(audit["fit_reach"].values))
        return judged.rename(
            fit_reach="reach", fit_reach_frequency="reach_frequency", excluded="left_out"
        )
    if contents is None or not contents.plants:
        return None
    data = labelled(contents.plants)
    return data.assign(left_out=("response", left_out(contents)))


@in_house_style
def draw_worst(picked: WorstLedger, layout: Layout = WIDE) -> Figure:
    """Draw one row per unit: a tick per response, a dot for the largest, its place in words."""
    rows = min(len(picked.units), MOST_ROWS)
    figure = new_figure(layout, 0.9 + (0.235 if layout.is_narrow else 0.215) * max(rows, 2))
    ratios = (4, 6) if layout.is_narrow else (7, 3)
    marks, words = figure.subplots(1, 2, width_ratios=ratios, sharey=True)
    limit = max(1.06, min(1.04 * float(picked.largest.max(initial=0.0)), FARTHEST))
    for row in range(rows):
        _row(marks, picked, row, limit)
        _words(words, picked, row, layout)
    words.set_axis_off()
    words.set_xlim(0.0, 1.0)
    marks.axvline(1.0, color=WEIGHT, lw=1.3)
    marks.set_xlim(0.0, limit)
    marks.set_ylim(rows - 0.4, -0.6)
    marks.set_yticks(range(rows), [clipped(name, 16) for name in picked.units[:rows]])
    marks.tick_params(axis="y", length=0)
    marks.grid(axis="y", visible=False)
    marks.spines["left"].set_visible(False)
    marks.set_xlabel("reach")
    if len(picked.units) > rows:
        marks.set_title(f"{rows} units with the largest reach, of {len(picked.units)}")
    return figure


def _colour(picked: WorstLedger, row: int) -> str:
    if picked.left_out[row]:
        return SOFT_INK
    return ALARM if picked.largest[row] > 1.0 + 1e-6 else NOMINAL


def _row(axes: Axes, picked: WorstLedger, row: int, limit: float) -> None:
    largest = min(float(picked.largest[row]), 0.985 * limit)
    colour = _colour(picked, row)
    beyond = picked.largest[row] > limit
    reaches = picked.all_reaches[row]
    axes.hlines(row, 0.0, largest, color=RULE, lw=0.8, zorder=1)
    axes.plot(reaches, np.full(reaches.size, row), "|", color=BANDS[2], ms=6, mew=1.0, zorder=2)
    axes.plot(
        [largest],
        [row],
        ">" if beyond else "o",
        color=colour,
        mfc=PAPER if picked.left_out[row] else colour,
        ms=5.2,
        zorder=3,
    )


def _words(axes: Axes, picked: WorstLedger, row: int, layout: Layout) -> None:
    reach = f"{picked.largest[row]:.3f}" if picked.largest[row] < 10.0 else ">10"
    colour = INK if _colour(picked, row) == NOMINAL else _colour(picked, row)
    axes.text(0.0, row, reach, va="center", color=colour, fontweight="bold", size="small")
    axes.text(
        0.26 if layout.is_narrow else 0.19,
        row,
        _place(picked, row, layout),
        va="center",
        color=SOFT_INK,
        size="small",
    )


def _place(picked: WorstLedger, row: int, layout: Layout) -> str:
    condition, out = clipped(picked.condition[row], 24), "left out" if picked.left_out[row] else ""
    parts = [condition, frequency_label(float(picked.frequency[row])), picked.mode[row], out]
    if not layout.is_narrow:
        return " · ".join(part for part in parts if part)
    short = condition.replace("head ", "h").replace(",", "").replace(" °C", "°")
    parts = [short, parts[1].replace(" kHz", "k").replace(" Hz", ""), picked.mode[row], out[-3:]]
    return " ".join(part for part in parts if part)
