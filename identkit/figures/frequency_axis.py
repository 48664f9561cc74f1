"""Axes along frequency and ratio, with ticks that read as numbers and modes named on the edge."""

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import FixedLocator, NullLocator

from identkit.figures.style import RULE, SOFT_INK, Layout
from identkit.methods.arrays import FloatArray


def frequency_ticks(low: float, high: float, *, steps: Sequence[float] = (1, 2, 5)) -> FloatArray:
    """Return the 1-2-5 frequencies within [low, high], Hz."""
    decades = range(int(np.floor(np.log10(low))), int(np.ceil(np.log10(high))) + 1)
    ticks = np.array([step * 10.0**decade for decade in decades for step in steps])
    return ticks[(ticks >= low * 0.999) & (ticks <= high * 1.001)]


def _tick_text(tick: float) -> str:
    return f"{tick / 1000:g}k" if tick >= 1000 else f"{tick:g}"


def log_frequency_axis(
    axes: Axes, low: float, high: float, layout: Layout, *, label: bool = True
) -> None:
    """Give `axes` a logarithmic frequency axis labelled 100, 200, 500, 1k ... in Hz."""
    steps = (1, 3) if layout.is_narrow and np.log10(high / low) > 1.5 else (1, 2, 5)
    ticks = frequency_ticks(low, high, steps=steps)
    axes.set_xscale("log")
    axes.set_xlim(low, high)
    axes.xaxis.set_major_locator(FixedLocator(ticks.tolist()))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.set_xticklabels([_tick_text(tick) for tick in ticks] if label else [])
    if label:
        axes.set_xlabel("frequency, Hz")


def ratio_axis(axes: Axes, low: float, high: float) -> None:
    """Give `axes` a logarithmic ratio axis whose ticks read 0.1, 1, 10 rather than powers."""
    axes.set_yscale("log")
    axes.set_ylim(low, high)
    steps = (1, 2, 5) if high / low < 300 else (1, 3) if high / low < 3000 else (1,)
    decades = range(int(np.floor(np.log10(low))), int(np.ceil(np.log10(high))) + 1)
    ticks = [s * 10.0**d for d in decades for s in steps if low <= s * 10.0**d <= high]
    axes.yaxis.set_major_locator(FixedLocator(ticks))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.set_yticklabels([f"{tick:.4g}" for tick in ticks])


def mark_modes(
    axes: Axes,
    names: tuple[str, ...],
    frequency: FloatArray,
    band: tuple[float, float],
    layout: Layout,
    *,
    in_logarithms: bool = False,
) -> None:
    """Write the names of the modes along the upper edge, crowded ones one line higher.

    Parameters
    ----------
    axes
        A logarithmic axis, or one that carries logarithms to base 10.
    names, frequency
        (modes,) names and Hz, ascending.
    band
        Hz, ends of the axis.
    layout
        Decides how near is crowded.
    in_logarithms
        Whether the axis carries logarithms.
    """
    closest = (0.085 if layout.is_narrow else 0.035) * np.log10(band[1] / band[0])
    raised, before = False, -np.inf
    for name, hertz in zip(names, frequency, strict=True):
        if not band[0] <= hertz <= band[1]:
            continue
        at = float(np.log10(hertz))
        raised = at - before < closest and not raised
        before = at
        x = at if in_logarithms else hertz
        axes.axvline(x, color=RULE, lw=0.8, zorder=0)
        axes.annotate(
            name,
            (x, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 10 if raised else 1.5),
            textcoords="offset points",
            ha="center",
            va="bottom",
            color=SOFT_INK,
            size="small",
        )


def log_edges(frequency: FloatArray) -> FloatArray:
    """Return the (points + 1) edges half-way, in log frequency, between neighbouring points."""
    logs = np.log(frequency)
    if logs.size == 1:
        return np.asarray(np.exp([logs[0] - 0.01, logs[0] + 0.01]), dtype=float)
    middle = 0.5 * (logs[1:] + logs[:-1])
    first, last = 2 * logs[0] - middle[0], 2 * logs[-1] - middle[-1]
    return np.asarray(np.exp(np.concatenate([[first], middle, [last]])), dtype=float)
