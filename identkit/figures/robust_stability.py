"""The closed loop under the reciprocal of the weight, and where it passes it."""

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from identkit.figures.frequency_axis import log_frequency_axis, mark_modes, ratio_axis
from identkit.figures.style import (
    ALARM,
    NOMINAL,
    PAPER,
    WEIGHT,
    WIDE,
    Layout,
    frequency_label,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import FloatArray

DEEPEST = 1e-3


@dataclass(frozen=True, eq=False)
class LoopUnderWeight:
    """Curves of one controller on one set.

    Attributes
    ----------
    frequency
        (points,) Hz.
    closed
        (points,) the closed-loop function that the form compares with its weight.
    closed_name
        Its name, such as "|T|".
    limit
        (points,) 1/|W|.
    lost
        Intervals (Hz) in which `closed` is above `limit`.
    peak, peak_frequency
        Largest closed/limit, and where, Hz.
    band
        Hz, in which the set claims anything.
    mode_names, mode_frequency
        To read frequencies by.
    """

    frequency: FloatArray
    closed: FloatArray
    closed_name: str
    limit: FloatArray
    lost: tuple[tuple[float, float], ...]
    peak: float
    peak_frequency: float
    band: tuple[float, float]
    mode_names: tuple[str, ...]
    mode_frequency: FloatArray


@in_house_style
def draw_loop_under_weight(picked: LoopUnderWeight, layout: Layout = WIDE) -> Figure:
    """Draw the closed loop under the reciprocal of the weight; shade where it passes it."""
    figure = new_figure(layout, 4.2)
    axes = figure.subplots()
    f = picked.frequency
    ends = float(f[0]), float(f[-1])
    for low, high in picked.lost:
        axes.axvspan(max(low, ends[0]), min(high, ends[1]), color=ALARM, alpha=0.18, lw=0)
    axes.plot(f, picked.limit, color=WEIGHT, lw=1.6, label="1/|W|: not to be reached")
    axes.plot(f, picked.closed, color=NOMINAL, lw=1.4, label=f"{picked.closed_name}, nominal loop")
    _mark_peak(axes, picked)
    axes.set_ylabel("magnitude")
    curves = np.concatenate([picked.closed, picked.limit])
    bottom = max(float(curves[curves > 0.0].min()), DEEPEST * float(picked.limit.min()))
    ratio_axis(axes, 0.7 * bottom, 2.5 * float(curves.max()))
    log_frequency_axis(axes, *ends, layout)
    mark_modes(axes, picked.mode_names, picked.mode_frequency, ends, layout)
    axes.legend(loc="lower left")
    return figure


def _mark_peak(axes: Axes, picked: LoopUnderWeight) -> None:
    at = picked.peak_frequency
    if not picked.frequency[0] <= at <= picked.frequency[-1]:
        return
    height = float(np.exp(np.interp(np.log(at), np.log(picked.frequency), np.log(picked.closed))))
    colour = ALARM if picked.lost else NOMINAL
    axes.plot([at], [height], "o", mfc=PAPER, mec=colour, ms=5, zorder=4)
    axes.annotate(
        f"{picked.peak:.3g} of the limit at {frequency_label(at)}",
        (at, height),
        xytext=(0, 9),
        textcoords="offset points",
        ha="center",
        color=colour,
        bbox={"facecolor": PAPER, "edgecolor": "none", "alpha": 0.85, "pad": 0.6},
        zorder=5,
    )
