"""Run length of a whole family of charts, by simulation on dependent normal series."""

import numpy as np
import pytest

from identkit.methods.cusum_run_length import cusum_run_length
from identkit.methods.ewma_run_length import ewma_run_length
from identkit.methods.family_run_length import ChartFamily, family_limits
from identkit.methods.multivariate_ewma_run_length import multivariate_ewma_run_length
from identkit.methods.shewhart_individuals import individuals_run_length


def simulated_run_length(family, limits, correlation, repeats, seed):
    """Mean run length until any chart but that of group means signals, and its standard error."""
    generator = np.random.default_rng(seed)
    root = np.linalg.cholesky(correlation)
    shape = (repeats, family.series)
    moving, up, down = np.zeros(shape), np.zeros(shape), np.zeros(shape)
    joint = np.zeros((repeats, family.joint_series))
    lengths, running = np.zeros(repeats), np.ones(repeats, dtype=bool)
    deviation = np.sqrt(family.ewma_weight / (2 - family.ewma_weight))
    joint_scale = (2 - family.joint_weight) / family.joint_weight
    whiten = np.linalg.inv(root[: family.joint_series, : family.joint_series])
    while running.any():
        x = generator.standard_normal(shape) @ root.T
        lengths += running
        moving += family.ewma_weight * (x - moving)
        up = np.maximum(0.0, up + x - family.cusum_reference)
        down = np.maximum(0.0, down - x - family.cusum_reference)
        out = (np.abs(x) > limits.individuals) | (np.abs(moving) > limits.ewma * deviation)
        out |= (up > limits.cusum) | (down > limits.cusum)
        stop = out.any(axis=1)
        if family.joint_series:
            white = x[:, : family.joint_series] @ whiten.T
            joint += family.joint_weight * (white - joint)
            stop |= (joint**2).sum(axis=1) * joint_scale > limits.joint
        running &= ~stop
    return lengths.mean(), lengths.std() / np.sqrt(repeats)


def test_every_chart_has_the_same_run_length():
    family = ChartFamily(6, 3)
    limits = family_limits(family, 200.0)
    assert individuals_run_length(limits.individuals) == pytest.approx(limits.each, rel=1e-6)
    assert ewma_run_length(0.2, limits.ewma) == pytest.approx(limits.each, rel=1e-6)
    assert cusum_run_length(0.5, limits.cusum) == pytest.approx(limits.each, rel=1e-6)
    assert multivariate_ewma_run_length(3, 0.1, limits.joint) == pytest.approx(
        limits.each, rel=1e-6
    )
    assert limits.together == pytest.approx(200.0, rel=1e-5)


def test_more_charts_need_wider_limits():
    one, many = family_limits(ChartFamily(1), 370.0), family_limits(ChartFamily(54), 370.0)
    assert many.individuals > one.individuals > 3.0
    assert many.cusum > one.cusum
    assert many.ewma > one.ewma


@pytest.mark.parametrize("common", [0.0, 0.6, 0.95])
def test_the_run_length_is_at_least_what_is_stated(common):
    family = ChartFamily(6, 6)
    limits = family_limits(family, 60.0)
    correlation = np.full((6, 6), common) + (1.0 - common) * np.eye(6)
    mean, error = simulated_run_length(family, limits, correlation, 1200, seed=3)
    assert mean > 60.0 - 3.0 * error
    assert mean < 60.0 * 5.0  # the bound is not empty either


def test_the_individuals_of_independent_series_alone_are_exact():
    limit = family_limits(ChartFamily(4), 80.0)
    # four independent charts of individuals: the run length of the smallest of four geometrics
    alone = 1.0 / (1.0 - (1.0 - 1.0 / limit.each) ** 4)
    nothing = ChartFamily(4, 0, 0.2, 0.1, 0.5)
    wide = type(limit)(limit.individuals, np.inf, np.inf, np.inf, limit.each, alone)
    mean, error = simulated_run_length(nothing, wide, np.eye(4), 1500, seed=5)
    assert mean == pytest.approx(alone, abs=4.0 * error)
