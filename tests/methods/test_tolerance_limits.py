"""Tolerance limits and binomial limits: consistency and refusals."""

import numpy as np
import pytest

from identkit.methods.tolerance_limits import (
    binomial_interval,
    binomial_lower_limit,
    tolerance_content,
    tolerance_sample_size,
)


def test_first_order_content_has_its_closed_form():
    for draws in (1, 22, 24, 59):
        assert tolerance_content(draws, 0.9) == pytest.approx(0.1 ** (1.0 / draws), rel=1e-12)
    assert tolerance_content(3, 0.9, order=4) == 0.0


@pytest.mark.parametrize("order", [1, 2, 5])
@pytest.mark.parametrize("content", [0.5, 0.9, 0.99])
def test_the_sample_size_is_the_smallest(content, order):
    draws = tolerance_sample_size(content, 0.9, order)
    assert tolerance_content(draws, 0.9, order) >= content
    assert tolerance_content(draws - 1, 0.9, order) < content


def test_all_successes_agree_with_the_tolerance_content():
    assert binomial_lower_limit(24, 24, 0.95) == pytest.approx(tolerance_content(24, 0.95))
    assert binomial_lower_limit(0, 9, 0.95) == 0.0


def test_intervals_cover_at_least_what_they_say():
    rng = np.random.default_rng(1)
    for truth in (0.05, 0.3, 0.9):
        counts = rng.binomial(20, truth, 3000)
        limits = {k: binomial_interval(int(k), 20, 0.9) for k in np.unique(counts)}
        inside = np.mean([limits[k][0] <= truth <= limits[k][1] for k in counts])
        assert inside > 0.9 - 3.0 * np.sqrt(0.09 / 3000)


@pytest.mark.parametrize(
    "call",
    [
        lambda: tolerance_sample_size(1.0, 0.9),
        lambda: tolerance_sample_size(0.9, 0.0),
        lambda: tolerance_sample_size(0.9, 0.9, 0),
        lambda: tolerance_content(5, float("nan")),
        lambda: tolerance_content(5, 0.9, 0),
        lambda: binomial_interval(5, 4, 0.9),
        lambda: binomial_interval(0, 0, 0.9),
        lambda: binomial_lower_limit(-1, 4, 0.9),
    ],
)
def test_impossible_requests_are_refused(call):
    with pytest.raises(ValueError, match="expected"):
        call()
