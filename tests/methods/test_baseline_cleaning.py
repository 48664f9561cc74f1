import numpy as np
from scipy import stats

from identkit.methods.baseline_cleaning import clean_baseline


def test_clean_baselines_are_seldom_touched():
    generator = np.random.default_rng(1)
    touched = sum(
        not clean_baseline(generator.standard_normal(14), np.ones(14)).all() for _ in range(250)
    )
    assert stats.binomtest(touched, 250, 0.05).proportion_ci(0.999).low <= 0.05


def test_units_that_are_off_are_left_out_even_in_pairs():
    generator = np.random.default_rng(2)
    for _ in range(20):
        values = generator.standard_normal(16)
        values[[3, 9]] = 12.0
        kept = clean_baseline(values, np.ones(16))
        assert not kept[[3, 9]].any()
        assert kept.sum() >= 12


def test_a_poorly_measured_unit_is_given_its_allowance():
    values = np.concatenate([np.linspace(-1.0, 1.0, 11), [6.0]])
    assert not clean_baseline(values, np.ones(12))[-1]
    assert clean_baseline(values, np.append(np.ones(11), 25.0))[-1]


def test_missing_points_do_not_belong():
    values = np.array([0.1, np.nan, -0.2, 0.3, 0.0, 0.2])
    np.testing.assert_array_equal(clean_baseline(values, np.ones(6)), np.isfinite(values))
