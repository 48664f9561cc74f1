"""What screening marked: one tile per response, and the share of points masked by frequency."""

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from identkit.figures.frequency_axis import log_edges, log_frequency_axis
from identkit.figures.labels import TextArray, condition_of, natural_key, units_of
from identkit.figures.style import (
    BANDS,
    INK,
    PAPER,
    SOFT_INK,
    WIDE,
    Layout,
    clipped,
    group_style,
    in_house_style,
    new_figure,
)
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import BoolArray, FloatArray, IntArray

MOST_UNITS = 60
MASKS = (
    ("low_coherence_mask", "coherence below the limit"),
    ("outside_band_mask", "outside the band"),
    ("missing_mask", "missing"),
)


@dataclass(frozen=True)
class ScreeningOverview:
    """Marks of every response and masked points by frequency.

    Attributes
    ----------
    units, conditions
        Names of the rows and columns of tiles.
    present
        (units, conditions) number of responses measured there.
    marks
        Names of the marks.
    marked
        (marks, units, conditions) number of responses that carry the mark.
    frequency
        (points,) Hz.
    masked_share
        (masks, points) share of responses whose point is masked, by reason.
    reasons
        Names of the reasons.
    hidden_units
        Number of unmarked units left out of the picture for want of room.
    """

    units: tuple[str, ...]
    conditions: tuple[str, ...]
    present: IntArray
    marks: tuple[str, ...]
    marked: IntArray
    frequency: FloatArray
    masked_share: FloatArray
    reasons: tuple[str, ...]
    hidden_units: int


def pick_screening(screening: Gridded, responses: Gridded) -> ScreeningOverview:
    """Pick the marks by unit and condition, and why points were masked.

    Parameters
    ----------
    screening, responses
        As written by the screen and read stages; of several grids the first one's points are
        shown by frequency.
    """
    pairs = list(zip(datasets(screening), datasets(responses), strict=True))
    units = np.concatenate([units_of(part) for _, part in pairs])
    conditions = np.concatenate([condition_of(part) for _, part in pairs])
    marks = tuple(str(name) for name in pairs[0][0]["mark"].values)
    marked = np.concatenate([part["response_mark"].values for part, _ in pairs])
    rows, hidden = _rows(units, np.asarray(marked.any(axis=1), dtype=bool))
    columns = sorted(set(conditions.tolist()), key=natural_key)
    present = np.zeros((len(rows), len(columns)), dtype=int)
    counts = np.zeros((len(marks), len(rows), len(columns)), dtype=int)
    place = {name: at for at, name in enumerate(rows)}
    for unit, condition, flags in zip(units, conditions, marked, strict=True):
        if unit in place:
            at = (place[str(unit)], columns.index(str(condition)))
            present[at] += 1
            counts[(slice(None), *at)] += flags
    first = pairs[0][0]
    known = [(name, reason) for name, reason in MASKS if name in first]
    shares = [first[name].values.mean(axis=(0, 1, 2)) for name, _ in known]
    return ScreeningOverview(
        units=tuple(rows),
        conditions=tuple(columns),
        present=present,
        marks=marks,
        marked=counts,
        frequency=first["frequency"].values,
        masked_share=np.array(shares).reshape(len(known), -1),
        reasons=tuple(reason for _, reason in known),
        hidden_units=hidden,
    )


def _rows(units: TextArray, flagged: BoolArray) -> tuple[list[str], int]:
    """Return the units to show, marked ones first when there are too many, and how many are not."""
    every = sorted(set(units.tolist()), key=natural_key)
    if len(every) <= MOST_UNITS:
        return every, 0
    with_marks = set(units[flagged].tolist())
    kept = sorted(every, key=lambda name: (name not in with_marks, natural_key(name)))[:MOST_UNITS]
    return sorted(kept, key=natural_key), len(every) - MOST_UNITS


@in_house_style
def draw_screening(picked: ScreeningOverview, layout: Layout = WIDE) -> Figure:
    """Draw a sheet of tiles, one per unit and condition, marks on them; below, masked points."""
    rows = len(picked.units) if layout.is_narrow else len(picked.conditions)
    sheet_height = float(np.clip(0.185 * rows, 0.8, 8.0))
    any_masked = bool((picked.masked_share > 0.0).any())
    figure = new_figure(layout, 1.2 + sheet_height + 1.3 * any_masked)
    if any_masked:
        sheet, masked = figure.subplots(2, 1, height_ratios=(sheet_height, 1.0))
        _masked(masked, picked, layout)
    else:
        sheet = figure.subplots()
    _sheet(sheet, picked, layout)
    columns = 2 if layout.is_narrow else 5
    figure.legend(handles=_sheet_legend(picked), loc="outside upper left", ncols=columns)
    return figure


def _sheet(axes: Axes, picked: ScreeningOverview, layout: Layout) -> None:
    """Draw the tiles: units down on phones, units across on desks."""
    present, marked = picked.present, picked.marked
    down, across = picked.units, tuple(_short(text) for text in picked.conditions)
    if not layout.is_narrow:
        present, marked = present.T, marked.transpose(0, 2, 1)
        down, across = picked.conditions, picked.units
    axes.imshow(
        np.where(present > 0, 1.0, np.nan),
        cmap=ListedColormap([BANDS[1]]),
        aspect="auto",
        interpolation="none",
        vmin=0.0,
        vmax=1.0,
    )
    count = len(picked.marks)
    for at in range(count):
        colour, marker = group_style(at * 2)
        row, column = np.nonzero(marked[at])
        shift = (at - (count - 1) / 2.0) * 0.28
        axes.plot(column + shift, row, marker, color=colour, ms=5, mec=PAPER, mew=0.5)
    _tile_edges(axes, down, across, layout)


def _tile_edges(axes: Axes, down: tuple[str, ...], across: tuple[str, ...], layout: Layout) -> None:
    axes.set_xticks(range(len(across)), [clipped(text, 16) for text in across])
    axes.set_yticks(range(len(down)), [clipped(text, 22) for text in down])
    crowded = sum(min(len(text), 16) + 2 for text in across) > 14.0 * layout.width
    axes.tick_params(axis="x", labelsize="x-small", rotation=90 if crowded else 0, length=0)
    axes.tick_params(axis="y", labelsize="x-small", length=0)
    axes.set_xticks(np.arange(-0.5, len(across)), minor=True)
    axes.set_yticks(np.arange(-0.5, len(down)), minor=True)
    axes.grid(visible=False)
    axes.grid(which="minor", color=PAPER, lw=1.6)
    axes.tick_params(which="minor", length=0)
    for spine in axes.spines.values():
        spine.set_visible(False)


def _short(condition: str) -> str:
    return condition.replace("head ", "h").replace(" °C", "°").replace(",", "")


def _sheet_legend(picked: ScreeningOverview) -> list[Line2D]:
    handles = [Line2D([], [], color=BANDS[1], marker="s", ls="none", ms=7, label="measured")]
    for at, name in enumerate(picked.marks):
        colour, marker = group_style(at * 2)
        number = int((picked.marked[at] > 0).sum())
        handles.append(
            Line2D([], [], color=colour, marker=marker, ls="none", ms=5, label=f"{name}: {number}")
        )
    return handles


def _masked(axes: Axes, picked: ScreeningOverview, layout: Layout) -> None:
    positive = picked.frequency > 0.0
    frequency, shares = picked.frequency[positive], picked.masked_share[:, positive]
    edges = log_edges(frequency)
    for at, reason in enumerate(picked.reasons):
        if (shares[at] > 0.0).any():
            axes.stairs(100.0 * shares[at], edges, color=group_style(at)[0], lw=1.1, label=reason)
    axes.set_ylabel("masked, %", color=INK)
    axes.set_ylim(bottom=0.0)
    axes.legend(loc="upper left", labelcolor=SOFT_INK)
    log_frequency_axis(axes, float(frequency[0]), float(frequency[-1]), layout)
