"""Choice of the order of a magnitude weight from the whole trade-off of excess against order.

Rule: the order that minimises excess + price * order is chosen, the smaller one on a tie; that is,
the smallest order beyond which no higher order buys more than `price` dB per added order. With the
excess taken as misfit this is a penalised choice of model size in the manner of H. Akaike,
"A new look at the statistical model identification", IEEE Trans. Automatic Control 19(6), 716-723,
1974, with the price set by what an order is worth in dB.
"""

from dataclasses import dataclass

import numpy as np

from identkit.errors import InfeasibleError
from identkit.methods.arrays import FloatArray
from identkit.methods.magnitude_weight import (
    DAMPING_FLOOR,
    TOLERANCE_DB,
    MagnitudeWeight,
    WeightClimb,
)
from identkit.methods.radius_problem import radius_problem

ORDERS = (0, 1, 2, 3, 4, 6, 8, 10, 12, 16)
PRICE_DB = 0.5


@dataclass(frozen=True)
class OrderChoice:
    """Trade-off and choice.

    Attributes
    ----------
    weights
        One weight per order tried, ascending; orders that cannot stay below the cap are missing.
    chosen
        The weight chosen.
    rule
        The rule, in words, with the figures that decided.
    """

    weights: tuple[MagnitudeWeight, ...]
    chosen: MagnitudeWeight
    rule: str


def choose_order(
    frequency_hz: FloatArray,
    radius: FloatArray,
    *,
    profile: FloatArray | None = None,
    cap: FloatArray | None = None,
    max_order: int = 12,
    price_db: float = PRICE_DB,
    damping_floor: float = DAMPING_FLOOR,
    tolerance_db: float = TOLERANCE_DB,
    outside_factor: float = 10.0,
    ceiling: tuple[FloatArray, FloatArray] | None = None,
) -> OrderChoice:
    """Fit weights of ascending order and choose one: least excess + price_db * order.

    Parameters
    ----------
    frequency_hz, radius, profile, cap, damping_floor, tolerance_db, outside_factor, ceiling
        As in `fit_magnitude_weight`.
    max_order
        Highest order tried; fewer points than 2 max_order + 1 lower it.
    price_db
        Excess, dB, that one more order has to save to be worth it.

    Returns
    -------
    OrderChoice
        All weights and the chosen one.

    Raises
    ------
    InputError, InfeasibleError
        As `fit_magnitude_weight`; infeasible only if no order tried stays below the cap.
    """
    points = int(np.unique(np.asarray(frequency_hz, dtype=float)).size)
    most = max(min(max_order, (points - 1) // 2), 0)
    problem = radius_problem(
        frequency_hz,
        radius,
        most,
        profile=profile,
        cap=cap,
        ceiling=ceiling,
        outside_factor=outside_factor,
    )
    climb = WeightClimb(problem, damping_floor, tolerance_db)
    weights = _climbed(climb, [n for n in ORDERS if n < most] + [most])
    chosen = min(weights, key=lambda weight: weight.excess_db + price_db * weight.order)
    return OrderChoice(tuple(weights), chosen, _in_words(chosen, weights, price_db))


def _climbed(climb: WeightClimb, orders: list[int]) -> list[MagnitudeWeight]:
    weights: list[MagnitudeWeight] = []
    for order in orders:
        try:
            weights.append(climb.weight(order))
        except InfeasibleError:
            if order == orders[-1]:
                raise
    return weights


def _in_words(chosen: MagnitudeWeight, weights: list[MagnitudeWeight], price_db: float) -> str:
    higher = [weight for weight in weights if weight.order > chosen.order]
    text = (
        f"order {chosen.order}: least excess + {price_db:g} dB per order "
        f"(excess {chosen.excess_db:.2f} dB)"
    )
    if not higher:
        return f"{text}; it is the highest order tried"
    saved, best = max(
        ((chosen.excess_db - w.excess_db) / (w.order - chosen.order), w.order) for w in higher
    )
    return f"{text}; the best of the higher ones, {best}, saves {saved:.2f} dB per added order"
