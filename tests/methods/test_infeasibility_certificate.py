import numpy as np
import pytest

from identkit.methods.infeasibility_certificate import proves_infeasible

# c1 <= 0 and c2 <= 0 contradict c1 + c2 = 1
ROWS = np.eye(2)
NORMAL = np.ones(2)


def test_contradiction_is_proven():
    assert proves_infeasible(ROWS, NORMAL, np.ones(2), np.full(2, 1e3))


def test_multipliers_that_leave_out_a_needed_row_prove_nothing():
    assert not proves_infeasible(ROWS, NORMAL, np.array([1.0, 0.0]), np.full(2, 1e3))
    assert not proves_infeasible(ROWS, NORMAL, np.array([1.0, -1.0]), np.full(2, 1e3))


def test_feasible_rows_are_never_refuted():
    rng = np.random.default_rng(0)
    for _ in range(200):
        rows = rng.standard_normal((8, 3))
        inside = rng.standard_normal(3)
        rows[rows @ inside > 0.0] *= -1.0
        normal = inside / (inside @ inside)  # inside itself meets rows @ c <= 0, normal @ c = 1
        assert not proves_infeasible(rows, normal, np.ones(8), np.full(3, 1e3))


@pytest.mark.parametrize("shift", [1e-3, 1e-8])
def test_nearly_feasible_rows_are_refuted_only_for_bounded_unknowns(shift):
    # c1 - c2 <= 0, c2 - (1 - shift) c1 <= 0, c1 <= 0 is needed; here c = (1, 1 - shift / 2) / norm
    rows = np.array([[1.0, -1.0], [-(1.0 - shift), 1.0]])
    # the second row scaled up leaves shift * c1 <= 0, against c1 = 1
    normal = np.array([1.0, 0.0])
    assert proves_infeasible(rows, normal, np.ones(2), np.full(2, 10.0))
    assert not proves_infeasible(rows, normal, np.ones(2), np.full(2, 1e20))
