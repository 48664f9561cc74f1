"""What nominal and bound wrote besides the set: pointwise floor and the orders tried."""

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


def pointwise_floor(nominal: xr.Dataset | None) -> Floor | None:
    """Return the floor that the nominal stage computed, None where it did not run."""
    if nominal is None or "radius_floor" not in nominal:
        return None
    return Floor(nominal["frequency"].values, nominal["radius_floor"].values)


def order_tradeoff(bound: xr.Dataset | None, chosen: int) -> OrderTradeoff | None:
    """Return the orders tried with what each achieved, None where only one was tried."""
    if bound is None or "trial_order" not in bound or bound.sizes["trial"] < 2:
        return None
    order = np.asarray(bound["trial_order"].values, dtype=np.int64)
    rising = np.argsort(order, kind="stable")
    return OrderTradeoff(
        order=order[rising],
        excess=bound["trial_excess_db"].values[rising],
        floor=bound["trial_floor_db"].values[rising],
        chosen=chosen,
    )
