"""Constants that unbias ranges and standard deviations of small normal samples.

Sources: L. H. C. Tippett, "On the extreme individuals and the range of samples taken from a normal
population", Biometrika 17 (1925) 364-387 (mean and standard deviation of the range, integrated
here); W. A. Shewhart, *Economic Control of Quality of Manufactured Product*, 1931 (factors of the
limits).
"""

import numpy as np
from scipy.special import gammaln
from scipy.stats import norm

from identkit.methods.absorbing_chain import legendre_nodes

_FARTHEST = 9.0
_NODES = 240


def unbiased_deviation_factor(size: int) -> float:
    """Return c4: mean of the sample standard deviation (divisor n - 1) over the true one."""
    return float(np.sqrt(2.0 / (size - 1.0)) * np.exp(gammaln(size / 2) - gammaln((size - 1) / 2)))


def mean_range_factor(size: int) -> float:
    """Return d2: mean of the range of `size` normal values over their standard deviation."""
    x, weight = legendre_nodes(-_FARTHEST, _FARTHEST, _NODES)
    return float(weight @ (1.0 - norm.cdf(x) ** size - norm.sf(x) ** size))


def range_deviation_factor(size: int) -> float:
    """Return d3: standard deviation of the range of `size` normal values over theirs."""
    x, weight = legendre_nodes(-_FARTHEST, _FARTHEST, _NODES)
    apart, measure = legendre_nodes(0.0, 2.0 * _FARTHEST, _NODES)
    low, high = x[:, None], x[:, None] + apart
    within = np.clip(norm.cdf(high) - norm.cdf(low), 0.0, 1.0)
    kernel = 1.0 - norm.cdf(high) ** size - norm.sf(low) ** size + within**size
    square = 2.0 * weight @ kernel @ measure
    return float(np.sqrt(square - mean_range_factor(size) ** 2))


def limit_factors(size: int) -> dict[str, float]:
    """Return the factors of three-sigma limits for samples of `size` (Shewhart 1931).

    Returns
    -------
    dict
        A2, A3 (mean from mean range, mean standard deviation), B3, B4 (standard deviation), D3,
        D4 (range); the lower ones cut at zero.
    """
    c4, d2, d3 = (
        unbiased_deviation_factor(size),
        mean_range_factor(size),
        range_deviation_factor(size),
    )
    of_deviation = 3.0 * np.sqrt(1.0 - c4**2) / c4
    return {
        "A2": float(3.0 / (d2 * np.sqrt(size))),
        "A3": float(3.0 / (c4 * np.sqrt(size))),
        "B3": float(max(0.0, 1.0 - of_deviation)),
        "B4": float(1.0 + of_deviation),
        "D3": max(0.0, 1.0 - 3.0 * d3 / d2),
        "D4": 1.0 + 3.0 * d3 / d2,
    }
