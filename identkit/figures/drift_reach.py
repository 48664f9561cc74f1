"""Reach of every unit over time, and where its trend would meet 1."""

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter
from matplotlib.figure import Figure

from identkit.figures.style import (
    ALARM,
    NOMINAL,
    SOFT_INK,
    WEIGHT,
    WIDE,
    Layout,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import BoolArray, FloatArray
from identkit.stages.drift_signals import ROUNDING, Exit

_FARTHEST = 1.0  # how much farther than the record the extrapolation is drawn, at most


@dataclass(frozen=True, eq=False)
class DriftReach:
    """Reach over time.

    Attributes
    ----------
    time, reach
        (points,) days since 1970, or units made; largest reach of every unit.
    in_set, again
        (points,) whether the set was made from it; whether it is a later visit of a unit.
    dated
        Whether time is in days.
    trend
        Two points (time, reach) of the fitted trend and two of its extrapolation; None without.
    crossing
        (estimate, low, high) of the time at which the trend meets 1; None without.
    """

    time: FloatArray
    reach: FloatArray
    in_set: BoolArray
    again: BoolArray
    dated: bool
    trend: FloatArray | None
    crossing: tuple[float, float, float] | None


def pick_drift_reach(points: xr.Dataset, exit_: Exit | None) -> DriftReach | None:
    """Return reach over time; None where it is not known.

    Parameters
    ----------
    points
        All visits, as made by `unit_points`.
    exit_
        As told by `time_to_exit`.
    """
    reach = points["largest_reach"].values
    if not np.isfinite(reach).any():
        return None
    trend, crossing = None, None
    time = points["time"].values
    if exit_ is not None and exit_.believed:
        line = exit_.mean
        last = float(time.max())
        fresh = time[~points["in_set"].values]
        start = float(fresh.min())
        end = min(line.high, last + _FARTHEST * (last - start))
        at = np.array([start, last, last, end])
        trend = np.array([at, np.exp(line.level_now + line.slope * (at - last))])
        crossing = (line.crossing, line.low, line.high)
    return DriftReach(
        time,
        reach,
        points["in_set"].values,
        points["visit_number"].values > 1,
        points.attrs["ordered_by"] == "measured_at",
        trend,
        crossing,
    )


@in_house_style
def draw_drift_reach(picked: DriftReach, layout: Layout = WIDE) -> Figure:
    """Draw reach by unit with the line at 1, and the extrapolated trend broken."""
    figure = new_figure(layout, 3.6)
    axes = figure.subplots()
    axes.axhline(1.0, color=ALARM, lw=1.4)
    outside = picked.reach > 1.0 + ROUNDING
    for chosen, marker, face, edge, name in (
        (picked.in_set & ~picked.again, "o", "none", SOFT_INK, "the set was made from it"),
        (~picked.in_set & ~picked.again & ~outside, "o", NOMINAL, NOMINAL, "held"),
        (~picked.in_set & ~picked.again & outside, "D", WEIGHT, WEIGHT, "not held"),
        (picked.again, "s", "none", NOMINAL, "measured again"),
    ):
        if chosen.any():
            axes.plot(
                picked.time[chosen],
                picked.reach[chosen],
                marker,
                mfc=face,
                mec=edge,
                ms=5.5,
                label=name,
            )
    if picked.trend is not None and picked.crossing is not None:
        at, level = picked.trend
        axes.plot(at[:2], level[:2], color=WEIGHT, lw=1.6, label="trend")
        axes.plot(at[2:], level[2:], color=WEIGHT, lw=1.6, ls=(0, (3, 2)), label="extrapolation")
        axes.axvspan(
            max(picked.crossing[1], float(picked.time.min())),
            min(picked.crossing[2], float(at[-1])),
            color=WEIGHT,
            alpha=0.16,
            lw=0,
            label="meets 1, 95 %",
        )
    axes.set_yscale("log")
    low, high = (
        float(np.nanmin(picked.reach)),
        float(np.nanmax(picked.reach[picked.reach < np.inf])),
    )
    axes.set_ylim(0.9 * min(low, 0.7), 1.15 * max(high, 1.1))
    _plain_ticks(axes)
    axes.set_ylabel("largest reach of the unit")
    if picked.dated:
        most = 5 if layout.is_narrow else 9
        locator: Any = AutoDateLocator(minticks=3, maxticks=most)  # type: ignore[no-untyped-call]
        axes.xaxis.set_major_locator(locator)
        shown: Any = ConciseDateFormatter(locator)  # type: ignore[no-untyped-call]
        axes.xaxis.set_major_formatter(shown)
        axes.set_xlabel("measured")
    else:
        axes.set_xlabel("units in the order of entry")
    axes.legend(loc="upper left", ncols=1 if layout.is_narrow else 3)
    return figure


def _plain_ticks(axes: Any) -> None:
    low, high = axes.get_ylim()
    ticks = [
        x for x in (0.1, 0.2, 0.3, 0.5, 0.7, 1.0, 1.5, 2.0, 3.0, 5.0, 10.0) if low <= x <= high
    ]
    axes.set_yticks(ticks, [f"{x:g}" for x in ticks])
    axes.set_yticks([], minor=True)
