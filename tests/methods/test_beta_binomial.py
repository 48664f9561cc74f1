"""Shares that scatter, seen through counts."""

import numpy as np
import pytest
from scipy import stats

from identkit.methods.beta_binomial import BetaShares, fit_beta_binomial

# Number of boys in the first 12 of families of 13 children: 6115 families of Saxony, 1876-1885
# (A. Geissler), the usual example of the law; counts from memory, they add up to 6115.
BOYS = np.array([3, 24, 104, 286, 670, 1033, 1343, 1112, 829, 478, 181, 45, 7])


def test_the_published_example_of_saxon_families():
    counts = np.repeat(np.arange(13), BOYS)
    assert counts.size == 6115
    found = fit_beta_binomial(counts, 12)
    # maximum likelihood 34.1, 31.6: J. K. Lindsey and P. M. E. Altham, Applied Statistics 47
    # (1998) 149-157, on these data; value from memory, hence the tolerance
    assert found.successes == pytest.approx(34.1, abs=0.6)
    assert found.failures == pytest.approx(31.6, abs=0.6)


def test_the_maximum_is_that_of_the_reference_library():
    counts = stats.betabinom.rvs(20, 6.0, 3.0, size=80, random_state=np.random.default_rng(4))
    found = fit_beta_binomial(counts, 20)

    def likelihood(a, b):
        return stats.betabinom.logpmf(counts, 20, a, b).sum()

    best = likelihood(found.successes, found.failures)
    for a, b in ((1.05, 1.0), (0.95, 1.0), (1.0, 1.05), (1.0, 0.95), (1.1, 1.1)):
        assert likelihood(found.successes * a, found.failures * b) <= best + 1e-6


def test_the_scatter_of_counting_is_no_scatter_of_shares():
    counts = np.random.default_rng(1).binomial(40, 0.7, size=200)
    found = fit_beta_binomial(counts, 40)
    assert found.mean == pytest.approx(0.7, abs=0.02)
    # the counts alone would spread 0.07 either way
    assert found.quantile(0.1) > 0.66


def test_quantile_and_chance_are_those_of_the_laws():
    law = BetaShares(9.0, 2.0)
    assert law.quantile(0.1) == pytest.approx(stats.beta.ppf(0.1, 9.0, 2.0))
    assert law.chance_of_at_most(7, 12) == pytest.approx(stats.betabinom.cdf(7, 12, 9.0, 2.0))


@pytest.mark.parametrize(("counts", "mean"), [([20, 20], 1 - 0.5 / 40), ([0, 0], 0.5 / 40)])
def test_all_or_none_leaves_half_a_success_of_doubt(counts, mean):
    found = fit_beta_binomial(np.array(counts), 20)
    assert found.mean == pytest.approx(mean)
    assert 0.0 < found.quantile(0.1) < 1.0


@pytest.mark.parametrize("counts", [[], [-1], [21]])
def test_impossible_counts_are_refused(counts):
    with pytest.raises(ValueError, match="expected counts in range"):
        fit_beta_binomial(np.array(counts, dtype=int), 20)
