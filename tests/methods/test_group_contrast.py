"""Groups that stand apart are named, and only as often by chance as stated."""

import numpy as np
import pytest
from scipy.stats import ttest_ind

from identkit.methods.group_contrast import group_contrast

GROUPS = np.repeat(np.eye(4, dtype=bool), 6, axis=1)


def test_agrees_with_a_single_student_test():
    values = np.random.default_rng(1).standard_normal((24, 1))
    found = group_contrast(values, GROUPS)
    single = ttest_ind(values[:6, 0], values[6:, 0], equal_var=True).pvalue
    assert found[0, 0] == pytest.approx(min(4 * single, 1.0))


def test_names_the_group_that_was_moved():
    values = np.random.default_rng(2).standard_normal((24, 20))
    values[12:18, 3] += 6.0
    found = group_contrast(values, GROUPS)
    assert found[2, 3] < 0.01
    assert np.argwhere(found < 0.01).tolist() == [[2, 3]]


def test_cries_wolf_no_more_often_than_stated():
    generator = np.random.default_rng(3)
    tables = [group_contrast(generator.standard_normal((24, 10)), GROUPS) for _ in range(400)]
    alarms = sum(bool((table < 0.05).any()) for table in tables)
    # binomial: 400 tables at 5 % give 20, standard deviation 4.4; Bonferroni keeps below
    assert alarms <= 20 + 3 * 4.4


def test_small_groups_and_constants_are_not_judged():
    values = np.zeros((24, 2))
    values[:, 1] = np.arange(24)
    few = np.zeros((1, 24), dtype=bool)
    few[0, :2] = True
    assert np.isnan(group_contrast(values, few)).all()
    assert np.isnan(group_contrast(values, GROUPS)[:, 0]).all()
