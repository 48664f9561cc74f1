"""What the bound stage wrote besides the set: pointwise floor and the orders it tried."""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.figures.order_tradeoff import OrderTradeoff
from identkit.methods.arrays import FloatArray


@dataclass(frozen=True)
class Floor:
    """The radius that no nominal can beat, frequency by frequency.

    Attributes
    ----------
    frequency
        (points,) Hz.
    radius
        (points,).
    """

    frequency: FloatArray
    radius: FloatArray


def pointwise_floor(bound: xr.Dataset | None) -> Floor | None:
    """Return the pointwise floor of the bound stage, None where it was not computed."""
    if bound is None or "pointwise_floor" not in bound:
        return None
    return Floor(bound["frequency"].values, bound["pointwise_floor"].values)


def order_tradeoff(bound: xr.Dataset | None, chosen: int) -> OrderTradeoff | None:
    """Return the orders tried with what each achieved, None where only one was tried."""
    if bound is None or "order_excess_db" not in bound or bound.sizes["order"] < 2:
        return None
    return OrderTradeoff(
        order=np.asarray(bound["order"].values, dtype=np.int64),
        excess=bound["order_excess_db"].values,
        floor=bound["order_floor_db"].values,
        chosen=chosen,
    )
