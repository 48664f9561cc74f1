"""Two sets along frequency: their weights, and the reach of each in the other."""

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from identkit.figures.frequency_axis import log_frequency_axis, mark_modes, ratio_axis
from identkit.figures.style import INK, NOMINAL, WEIGHT, WIDE, Layout, in_house_style, new_figure
from identkit.methods.arrays import FloatArray

LARGEST_DRAWN = 1e3


@dataclass(frozen=True, eq=False)
class SetsAlong:
    """Curves of a first and a second set.

    Attributes
    ----------
    frequency
        (points,) Hz.
    weight_a, weight_b
        (points,) magnitude of the weights.
    b_in_a, a_in_b
        (points,) smallest scaling of one set that holds the other.
    names
        What the two are called.
    mode_names, mode_frequency
        To read frequencies by.
    """

    frequency: FloatArray
    weight_a: FloatArray
    weight_b: FloatArray
    b_in_a: FloatArray
    a_in_b: FloatArray
    names: tuple[str, str]
    mode_names: tuple[str, ...]
    mode_frequency: FloatArray


@in_house_style
def draw_sets(picked: SetsAlong, layout: Layout = WIDE) -> Figure:
    """Draw both weights, and below them the reach of each set in the other."""
    figure = new_figure(layout, 5.4)
    upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=(1.0, 1.0))
    ends = float(picked.frequency[0]), float(picked.frequency[-1])
    first, second = picked.names
    _pair(upper, picked.frequency, picked.weight_a, picked.weight_b, (first, second))
    upper.set_ylabel("weight")
    names = (f"reach of {first} in {second}", f"reach of {second} in {first}")
    _pair(lower, picked.frequency, picked.a_in_b, picked.b_in_a, names)
    lower.axhline(1.0, color=INK, lw=0.9)
    lower.set_ylabel("reach, at most 1 = contained")
    log_frequency_axis(upper, *ends, layout, label=False)
    log_frequency_axis(lower, *ends, layout)
    mark_modes(upper, picked.mode_names, picked.mode_frequency, ends, layout)
    return figure


def _pair(
    axes: Axes, f: FloatArray, first: FloatArray, second: FloatArray, names: tuple[str, str]
) -> None:
    drawn = [np.minimum(curve, LARGEST_DRAWN) for curve in (first, second)]
    axes.plot(f, drawn[0], color=NOMINAL, lw=1.5, label=names[0])
    axes.plot(f, drawn[1], color=WEIGHT, lw=1.5, ls=(0, (6, 2)), label=names[1])
    both = np.concatenate(drawn)
    ratio_axis(axes, 0.7 * float(both[both > 0.0].min()), 2.0 * float(both.max()))
    axes.legend(loc="upper left")
