import numpy as np
import pytest
from scipy import stats

from identkit.methods.recursive_residuals import (
    baseline_scores,
    joint_scores,
    normal_score,
    recursive_scores,
)
from identkit.methods.running_group_mean import running_group_scores


def scores_of_many(count=40, first=8, repeats=150, variance=None):
    generator = np.random.default_rng(2)
    relative = np.ones(count) if variance is None else variance
    everyone = np.ones(count, dtype=bool)
    rows = []
    for _ in range(repeats):
        values = 3.0 + 0.2 * np.sqrt(relative) * generator.standard_normal(count)
        rows.append(
            recursive_scores(
                values, np.ones((count, 1)), relative, np.arange(count) < first, everyone
            )[first:]
        )
    return np.array(rows)


def test_scores_are_independent_standard_normal_after_a_short_baseline():
    scores = scores_of_many()
    assert stats.kstest(scores.ravel(), "norm").pvalue > 0.01
    assert abs(np.corrcoef(scores[:, 0], scores[:, 1])[0, 1]) < 0.25
    lagged = np.corrcoef(scores[:, 1:].ravel(), scores[:, :-1].ravel())[0, 1]
    assert abs(lagged) < 0.05


def test_known_unequal_variances_are_allowed_for():
    variance = np.where(np.arange(40) % 3 == 0, 9.0, 1.0)
    assert stats.kstest(scores_of_many(variance=variance).ravel(), "norm").pvalue > 0.01


def test_the_first_score_is_student_t_of_the_baseline():
    values = np.array([1.0, 2.0, 4.0, 3.0, 9.0])
    baseline = np.arange(5) < 4
    found = recursive_scores(values, np.ones((5, 1)), np.ones(5), baseline, ~baseline)[4]
    ratio = (9.0 - 2.5) / (np.std(values[:4], ddof=1) * np.sqrt(1.25))
    assert found == pytest.approx(stats.norm.isf(stats.t.sf(ratio, 3)))


def test_a_scale_and_an_offset_change_nothing():
    generator = np.random.default_rng(4)
    values, ones, baseline = generator.standard_normal(30), np.ones((30, 1)), np.arange(30) < 10
    one = recursive_scores(values, ones, np.ones(30), baseline, ~baseline)
    other = recursive_scores(5e3 + 1e-3 * values, ones, np.ones(30), baseline, ~baseline)
    np.testing.assert_allclose(one[10:], other[10:], rtol=1e-6)


def test_points_that_do_not_teach_leave_the_reference_alone():
    values = np.concatenate([np.linspace(-1, 1, 10), np.full(5, 8.0)])
    baseline, nobody = np.arange(15) < 10, np.zeros(15, dtype=bool)
    scores = recursive_scores(values, np.ones((15, 1)), np.ones(15), baseline, nobody)
    np.testing.assert_allclose(scores[10:], scores[10])
    learnt = recursive_scores(values, np.ones((15, 1)), np.ones(15), baseline, ~nobody)
    assert learnt[14] < scores[14]


def test_too_short_a_baseline_gives_no_score():
    values = np.arange(6.0)
    scores = recursive_scores(
        values, np.ones((6, 1)), np.ones(6), np.arange(6) < 2, np.ones(6, dtype=bool)
    )
    assert np.isnan(scores).all()


def test_baseline_scores_leave_their_own_point_out():
    values = np.array([0.0, 1.0, -1.0, 0.5, 30.0])
    scores = baseline_scores(values, np.ones((5, 1)), np.ones(5), np.ones(5, dtype=bool))
    assert scores[4] == pytest.approx(
        normal_score((30.0 - 0.125) / (np.std(values[:4], ddof=1) * np.sqrt(1.25)), 3)
    )


def test_joint_scores_of_correlated_series_are_uncorrelated():
    generator = np.random.default_rng(6)
    mix = np.array([[1.0, 0.0, 0.0], [0.9, 0.4, 0.0], [0.5, 0.5, 0.6]])
    values = generator.standard_normal((900, 3)) @ mix.T
    baseline = np.arange(900) < 8
    scores = joint_scores(values, np.ones((900, 3)), baseline, ~baseline)[8:]
    np.testing.assert_allclose(np.corrcoef(scores.T), np.eye(3), atol=0.1)
    assert stats.kstest((scores**2).sum(axis=1), stats.chi2(3).cdf).pvalue > 0.01


def test_running_group_scores_are_standard_normal_and_find_a_lot():
    generator = np.random.default_rng(7)
    watched = np.arange(20) >= 12
    lots = np.where(watched, 1 + (np.arange(20) - 12) // 4, 0)
    finals = []
    for _ in range(400):
        values = generator.standard_normal(20)
        scores = running_group_scores(values, np.ones(20), lots, np.ones(20, dtype=bool), watched)
        finals.append(scores[[12, 15, 19]])
    for column in np.array(finals).T:
        assert stats.kstest(column, "norm").pvalue > 0.01
    values = generator.standard_normal(20)
    values[12:16] += 5.0
    scores = running_group_scores(values, np.ones(20), lots, lots == 0, watched)
    assert scores[15] > 3.0
    assert abs(scores[19]) < 3.0
