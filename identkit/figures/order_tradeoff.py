"""What each further order of the weight buys, with the proved floor of every order."""

from dataclasses import dataclass

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from identkit.figures.style import (
    FLOOR,
    INK,
    RULE,
    WEIGHT,
    WIDE,
    Layout,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import FloatArray, IntArray


@dataclass(frozen=True)
class OrderTradeoff:
    """Excess of the best weight found, by order.

    Attributes
    ----------
    order
        (orders,) orders tried, increasing.
    excess
        (orders,) dB, achieved.
    floor
        (orders,) dB, proved: no weight of this order does better.
    chosen
        The order chosen.
    """

    order: IntArray
    excess: FloatArray
    floor: FloatArray
    chosen: int


@in_house_style
def draw_order_tradeoff(picked: OrderTradeoff, layout: Layout = WIDE) -> Figure:
    """Draw achieved excess as dots on stems, the proved floor as bars under them."""
    figure = new_figure(layout, 3.0 if layout.is_narrow else 3.2)
    axes = figure.subplots()
    axes.vlines(picked.order, 0.0, picked.excess, color=RULE, lw=4.0)
    axes.hlines(
        picked.floor,
        picked.order - 0.32,
        picked.order + 0.32,
        color=FLOOR,
        lw=1.8,
        label="proved floor of this order",
    )
    axes.plot(picked.order, picked.excess, "o", color=WEIGHT, ms=5, label="achieved")
    at = np.flatnonzero(picked.order == picked.chosen)
    if at.size:
        axes.plot(picked.order[at], picked.excess[at], "o", ms=12, mfc="none", mec=INK, mew=1.3)
        axes.set_title(f"chosen: order {picked.chosen}, {picked.excess[at[0]]:.2f} dB")
    axes.set_xlabel("order of the weight")
    axes.set_ylabel("excess over radius × profile, dB")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.set_ylim(0.0, 1.25 * float(np.nanmax(picked.excess, initial=0.1)))
    axes.grid(axis="x", visible=False)
    axes.legend(loc="upper right")
    return figure
