"""Distribution-free tolerance limits and exact binomial intervals.

Sources: S. S. Wilks, "Determination of sample sizes for setting tolerance limits", Annals of
Mathematical Statistics 12 (1941) 91-96; C. J. Clopper and E. S. Pearson, "The use of confidence
or fiducial limits illustrated in the case of the binomial", Biometrika 26 (1934) 404-413.
The same exact binomial count is the sample size of M. C. Campi and S. Garatti, "The exact
feasibility of randomized solutions of uncertain convex programs", SIAM Journal on Optimization
19 (2008) 1211-1230, with as many support constraints as `order`.
"""

import numpy as np
from scipy.special import bdtr, betaincinv


def tolerance_sample_size(content: float, confidence: float, order: int = 1) -> int:
    """Return how many draws make the `order`-th largest an upper tolerance limit (Wilks 1941).

    The smallest N with ``P(Binomial(N, 1 - content) < order) <= 1 - confidence``.

    Parameters
    ----------
    content
        Share of the population to lie at or below the limit, between 0 and 1.
    confidence
        Probability that the limit does so, between 0 and 1.
    order
        1 for the largest draw, 2 for the second largest, and so on.

    Returns
    -------
    int
        Number of independent draws.

    Raises
    ------
    ValueError
        If a share is not strictly between 0 and 1, or `order` is below 1.

    Notes
    -----
    Applies to independent draws of one distribution; heads or repeats of one unit are not
    independent draws of units. Does not apply to draws that chose the limit otherwise.
    """
    _check_share("content", content)
    _check_share("confidence", confidence)
    if order < 1:
        raise ValueError(f"order is {order}; expected 1 or more")
    low, high = order - 1, order
    while _shortfall(high, content, order) > 1.0 - confidence:
        low, high = high, 2 * high
    while high - low > 1:
        middle = (low + high) // 2
        if _shortfall(middle, content, order) > 1.0 - confidence:
            low = middle
        else:
            high = middle
    return high


def tolerance_content(draws: int, confidence: float, order: int = 1) -> float:
    """Return the content that the `order`-th largest of `draws` reaches at `confidence`.

    One-sided Wilks (1941); for order 1 it is ``(1 - confidence)**(1 / draws)``.

    Parameters
    ----------
    draws
        Number of independent draws.
    confidence
        Probability of the statement, between 0 and 1.
    order
        1 for the largest draw, and so on.

    Returns
    -------
    float
        Share of the population; 0 when there are fewer draws than `order`.

    Raises
    ------
    ValueError
        If `confidence` is not strictly between 0 and 1, or `order` is below 1.
    """
    _check_share("confidence", confidence)
    if order < 1:
        raise ValueError(f"order is {order}; expected 1 or more")
    if draws < order:
        return 0.0
    # The share below the order-th largest of N draws is Beta(N - order + 1, order).
    return float(betaincinv(draws - order + 1, order, 1.0 - confidence))


def binomial_interval(successes: int, trials: int, confidence: float) -> tuple[float, float]:
    """Return the exact two-sided interval of a proportion (Clopper and Pearson 1934).

    Parameters
    ----------
    successes, trials
        Counts, ``0 <= successes <= trials`` and at least one trial.
    confidence
        Two-sided confidence, between 0 and 1.

    Returns
    -------
    tuple of float
        Lower and upper limit of the proportion; covers with at least `confidence`.

    Raises
    ------
    ValueError
        If the counts or the confidence are out of range.
    """
    _check_share("confidence", confidence)
    if not 0 <= successes <= trials or trials < 1:
        raise ValueError(f"{successes} of {trials}; expected a count between 0 and the trials")
    tail = 0.5 * (1.0 - confidence)
    failures = trials - successes
    low = 0.0 if successes == 0 else float(betaincinv(successes, failures + 1, tail))
    high = 1.0 if failures == 0 else float(betaincinv(successes + 1, failures, 1.0 - tail))
    return low, high


def binomial_lower_limit(successes: int, trials: int, confidence: float) -> float:
    """Return the exact one-sided lower limit of a proportion (Clopper and Pearson 1934).

    Equals `tolerance_content` of order 1 when every trial was a success.

    Parameters
    ----------
    successes, trials
        Counts, ``0 <= successes <= trials`` and at least one trial.
    confidence
        One-sided confidence, between 0 and 1.

    Returns
    -------
    float
        The proportion is at least this, with `confidence`.

    Raises
    ------
    ValueError
        If the counts or the confidence are out of range.
    """
    _check_share("confidence", confidence)
    if not 0 <= successes <= trials or trials < 1:
        raise ValueError(f"{successes} of {trials}; expected a count between 0 and the trials")
    if successes == 0:
        return 0.0
    return float(betaincinv(successes, trials - successes + 1, 1.0 - confidence))


def _shortfall(draws: int, content: float, order: int) -> float:
    """Probability that fewer than `order` of the draws lie above the content."""
    return float(bdtr(order - 1, draws, 1.0 - content))


def _check_share(name: str, value: float) -> None:
    if not (np.isfinite(value) and 0.0 < value < 1.0):
        raise ValueError(f"{name} is {value}; expected a share strictly between 0 and 1")
