"""Our norm against the bounded-real lemma as a semidefinite program (CHECKS of norms by SDP).

Boyd, El Ghaoui, Feron & Balakrishnan, *Linear Matrix Inequalities in System and Control Theory*,
1994: the H-infinity norm is the least gamma for which the bounded-real matrix inequality has a
solution. The two examples and their norms, 1/(2 z sqrt(1 - z^2)) and 1, are elementary.
"""

import cvxpy
import numpy as np
import pytest

from identkit.methods.bounded_real_norm import band_norm
from identkit.methods.state_space import StateSpace

pytestmark = pytest.mark.outside

RESONANCE = (np.array([[0.0, 1.0], [-1.0, -0.2]]), np.array([[0.0], [1.0]]), np.array([[1.0, 0.0]]))
ALL_PASS = (np.array([[-1.0]]), np.array([[1.0]]), np.array([[-2.0]]))


def least_gamma(a, b, c, d):
    states = len(a)
    p, gamma = cvxpy.Variable((states, states), symmetric=True), cvxpy.Variable()
    one = np.eye(1)
    inequality = cvxpy.bmat(
        [
            [a.T @ p + p @ a, p @ b, c.T],
            [b.T @ p, -gamma * one, d * one],
            [c, d * one, -gamma * one],
        ]
    )
    problem = cvxpy.Problem(cvxpy.Minimize(gamma), [p >> 0, inequality << 0])
    problem.solve(solver=cvxpy.CLARABEL)
    return float(gamma.value)


@pytest.mark.parametrize(
    ("matrices", "d", "expected"),
    [(RESONANCE, 0.0, 5.025189076), (ALL_PASS, 1.0, 1.0)],
    ids=["resonance", "all-pass"],
)
def test_norm_is_the_least_gamma_of_the_bounded_real_lemma(matrices, d, expected):
    found = least_gamma(*matrices, d)
    assert found == pytest.approx(expected, abs=1e-5)
    system = StateSpace(*matrices, np.array([[d]]))
    ours = band_norm(system, 1e-6, 1e6)
    assert ours.norm == pytest.approx(found, abs=1e-5)
