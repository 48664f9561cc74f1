r"""Whether many correlated quantities of few units can be normal.

Four statistics of the standardised quantities, each against what samples of the same size from a
normal law of the same correlation give (Monte Carlo test): the mean squared skewness, the mean
squared departure of kurtosis from that law, and how well two groups explain the first principal
score, and any single quantity. Skewed spreads show in the first two, lots that stand apart in the
last two.

Sources: K. V. Mardia, "Measures of multivariate skewness and kurtosis with applications",
Biometrika 57 (1970) 519-530, restricted here to the margins, because fewer units than quantities
leave no inverse covariance; L. Engelman and J. A. Hartigan, "Percentage points of a test for
clusters", Journal of the American Statistical Association 64 (1969) 1647-1648, on principal scores;
G. A. Barnard, discussion, Journal of the Royal Statistical Society B 25 (1963) 294 (Monte Carlo
test); C. E. Bonferroni (1936) for the four together.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray

STATISTICS = ("skewness", "kurtosis", "two groups of units", "two groups in one quantity")
FEWEST_UNITS = 8
_SIMULATED = 999


@dataclass(frozen=True)
class NormalityTest:
    """What the test found.

    Attributes
    ----------
    probability
        Chance of such a sample under the normal law, all statistics together; NaN where
        there are too few units to tell.
    statistic
        Name of the statistic that stands out most; "" where nothing could be tested.
    """

    probability: float
    statistic: str


def normality_test(samples: FloatArray, correlation: FloatArray, *, seed: int = 0) -> NormalityTest:
    """Test units for joint normality of their quantities (Mardia 1970, Monte Carlo).

    Parameters
    ----------
    samples
        (units, quantities); quantities that do not vary are left out.
    correlation
        (quantities, quantities) positive definite, of the law to compare with.
    seed
        Of the simulated samples.

    Notes
    -----
    Few units hide much: at a dozen only strong skewness or well separated lots are seen. A sample
    that passes is not thereby normal.
    """
    varies = samples.std(axis=0) > 1e-12 * np.abs(samples).max(axis=0, initial=1e-300)
    units, quantities = len(samples), int(varies.sum())
    if units < FEWEST_UNITS or quantities == 0:
        return NormalityTest(float("nan"), "")
    root = np.linalg.cholesky(correlation[np.ix_(varies, varies)])
    generator = np.random.default_rng(seed)
    normal = generator.standard_normal((_SIMULATED, units, quantities)) @ root.T
    simulated = _moments(normal)
    expected = simulated[1].mean(axis=0)
    of_normal = _statistics(normal, simulated, expected)
    one = samples[None, :, varies]
    found = _statistics(one, _moments(one), expected)
    above = (of_normal >= found).sum(axis=0) + 1
    chance = above / (_SIMULATED + 1)
    worst = int(np.argmin(chance))
    return NormalityTest(float(min(1.0, len(chance) * chance[worst])), STATISTICS[worst])


def _moments(samples: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return (sets, quantities) skewness and kurtosis."""
    scaled = _standardised(samples)
    return (scaled**3).mean(axis=1), (scaled**4).mean(axis=1)


def _standardised(samples: FloatArray) -> FloatArray:
    centred = samples - samples.mean(axis=1, keepdims=True)
    return np.asarray(centred / centred.std(axis=1, keepdims=True), dtype=float)


def _statistics(
    samples: FloatArray, moments: tuple[FloatArray, FloatArray], expected: FloatArray
) -> FloatArray:
    """Return (sets, 4) statistics; `expected` is the mean kurtosis under the normal law."""
    skewness, kurtosis = moments
    scaled = _standardised(samples)
    _, _, axes = np.linalg.svd(scaled, full_matrices=False)
    scores = scaled @ np.swapaxes(axes[:, :1], 1, 2)
    return np.stack(
        [
            (skewness**2).mean(axis=1),
            ((kurtosis - expected) ** 2).mean(axis=1),
            _two_groups(scores).max(axis=1),
            _two_groups(scaled).max(axis=1),
        ],
        axis=1,
    )


def _two_groups(scores: FloatArray) -> FloatArray:
    """Return (sets, scores) share of the sum of squares between the two best groups in a row."""
    ordered = np.sort(scores - scores.mean(axis=1, keepdims=True), axis=1)
    units = scores.shape[1]
    size = np.arange(1, units)[None, :, None]
    below = np.cumsum(ordered, axis=1)[:, :-1]
    between = below**2 * (1.0 / size + 1.0 / (units - size))
    # One unit far from all others is no group.
    return np.asarray(between[:, 1:-1].max(axis=1) / (ordered**2).sum(axis=1))
