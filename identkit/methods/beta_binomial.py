r"""A share that varies from draw to draw, seen through counts: the beta-binomial law.

Each count is binomial with a share of its own; the shares follow a beta law, which is fitted by
maximum likelihood. So the scatter of counting is not mistaken for scatter of the shares.

Source: J. G. Skellam, "A probability distribution derived from the binomial distribution by
regarding the probability of success as variable between the sets of trials", Journal of the Royal
Statistical Society B 10 (1948) 257-261.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray, IntArray

_LOGIT = (-12.0, 12.0)
_LOG_SIZE = (-1.0, 9.0)


@dataclass(frozen=True)
class BetaShares:
    """The beta law of the shares.

    Attributes
    ----------
    successes, failures
        Both parameters of the law, above zero.
    """

    successes: float
    failures: float

    @property
    def mean(self) -> float:
        """Mean share."""
        return self.successes / (self.successes + self.failures)

    def quantile(self, probability: float) -> float:
        """Return the share below which `probability` of the draws lie."""
        from scipy.special import betaincinv

        return float(betaincinv(self.successes, self.failures, probability))

    def chance_of_at_most(self, count: int, trials: int) -> float:
        """Return the probability of `count` or fewer successes in `trials` with one share."""
        from scipy.stats import betabinom

        return float(betabinom.cdf(count, trials, self.successes, self.failures))


def fit_beta_binomial(successes: IntArray, trials: int) -> BetaShares:
    """Fit the law of the shares to counts out of equally many trials (Skellam 1948).

    Parameters
    ----------
    successes
        (draws,) counts.
    trials
        Trials behind each count.

    Returns
    -------
    BetaShares
        Where counts scatter no more than one share explains, the law is as narrow as the search
        allows (successes + failures about 8000). All counts full or all empty give a mean half a
        success away from 1 or 0.

    Raises
    ------
    ValueError
        If there is no count, or one is out of range.
    """
    counts = np.asarray(successes, dtype=float)
    if counts.size == 0 or counts.min() < 0 or counts.max() > trials:
        raise ValueError(f"{counts.size} counts out of {trials}; expected counts in range")
    edge = 0.5 / (counts.size * trials)
    start = float(np.clip(counts.mean() / trials, edge, 1.0 - edge))
    if start in (edge, 1.0 - edge):
        # Nothing was ever seen to fail (or hold): only the mean can be told.
        size = float(counts.size * trials)
        return BetaShares(start * size, (1.0 - start) * size)
    return _most_likely(counts, trials, start)


def _most_likely(counts: FloatArray, trials: int, start: float) -> BetaShares:
    from scipy.optimize import minimize
    from scipy.special import betaln, expit, logit

    def cost(point: FloatArray) -> float:
        mean, size = float(expit(point[0])), float(np.exp(point[1]))
        a, b = mean * size, (1.0 - mean) * size
        return -float(np.sum(betaln(counts + a, trials - counts + b) - betaln(a, b)))

    ends = [
        minimize(cost, [float(logit(start)), size], method="L-BFGS-B", bounds=[_LOGIT, _LOG_SIZE])
        for size in (1.0, 3.0, 6.0)
    ]
    best = min(ends, key=lambda end: float(end.fun)).x
    mean, size = float(expit(best[0])), float(np.exp(best[1]))
    return BetaShares(mean * size, (1.0 - mean) * size)
