import numpy as np
import pytest

from identkit.methods.damping_rows import offending, rows_around, warped


@pytest.mark.parametrize(("damping", "kept"), [(0.0098, False), (0.0102, True)])
def test_rows_tell_a_single_pair_above_from_one_below_the_floor(damping, kept):
    """P = |p(j omega)|^2 of one pair: the rule is exact to first order in the damping ratio."""
    natural, centre = 300.0, 100.0
    root = natural * np.array([-damping + 1j * np.sqrt(1.0 - damping**2)])
    rows = rows_around(root, 0.01, centre, on_numerator=False)

    def squared(x):
        u = (1.0 - x) / (1.0 + x) * centre**2
        return ((natural**2 - u) ** 2 + 4.0 * damping**2 * natural**2 * u) * (1.0 + x) ** 2

    margin = squared(rows.at) - rows.share * squared(rows.beside)
    assert bool(np.all(margin >= 0.0)) is kept
    assert not rows.on_numerator.any()


def test_offending_roots_are_given_once():
    roots = np.array([-0.001 + 1j, -0.001 - 1j, -0.5 + 1j, -0.5 - 1j, -3.0 + 0j])
    np.testing.assert_array_equal(offending(roots, 0.01), [-0.001 + 1j])


def test_warp_maps_rest_and_infinity_to_the_ends():
    np.testing.assert_allclose(warped(np.array([0.0, 7.0, np.inf]), 7.0), [1.0, 0.0, -1.0])
