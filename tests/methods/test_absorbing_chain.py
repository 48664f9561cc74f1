import numpy as np
import pytest

from identkit.methods.absorbing_chain import AbsorbingChain, solve_limit
from identkit.methods.cusum_run_length import cusum_chain
from identkit.methods.ewma_run_length import ewma_chain
from identkit.methods.multivariate_ewma_run_length import multivariate_ewma_chain


def test_one_state_is_geometric():
    chain = AbsorbingChain(np.array([0.9]), np.array([[0.9]]))
    assert chain.average() == pytest.approx(10.0)
    np.testing.assert_allclose(chain.survival(3), [1.0, 0.9, 0.81, 0.729])


@pytest.mark.parametrize(
    "chain",
    [ewma_chain(0.2, 2.0), cusum_chain(0.5, 2.0), multivariate_ewma_chain(3, 0.2, 8.0)],
    ids=["ewma", "cusum", "multivariate ewma"],
)
def test_the_average_is_the_sum_of_the_chances_of_going_on(chain):
    assert chain.survival(4000).sum() == pytest.approx(chain.average(), rel=1e-9)


def test_a_limit_that_is_too_low_is_refused():
    with pytest.raises(ValueError, match="expected more than"):
        solve_limit(lambda limit: 10.0 + limit, 5.0, 0.0, 1.0)
