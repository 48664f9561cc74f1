"""Workers: one thread of linear algebra each, results in order, the same for any number of jobs."""

import numpy as np
from threadpoolctl import threadpool_info

from identkit.batch import run_batch


def threads_after_work(size):
    """Use linear algebra, then tell how many threads its libraries have."""
    from scipy.linalg import svdvals

    svdvals(np.eye(size))
    return max(library["num_threads"] for library in threadpool_info())


def squared(value):
    return value * value


def test_workers_hold_linear_algebra_to_one_thread():
    assert set(run_batch(threads_after_work, [50] * 20, jobs=2)) == {1}
    assert set(run_batch(threads_after_work, [50] * 3, jobs=1)) == {1}


def test_results_keep_the_order_of_the_elements():
    values = list(range(100))
    assert run_batch(squared, values, jobs=2) == [squared(v) for v in values]


def test_progress_reaches_the_end():
    seen = []
    run_batch(squared, list(range(20)), jobs=1, progress=lambda *count: seen.append(count))
    assert seen[-1] == (20, 20)
    assert seen == sorted(seen)
