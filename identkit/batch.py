"""The bridge from labelled data to methods: spread work over processes, gather in order.

Elements are worked off in chunks whose bounds follow from their number alone, and linear algebra
runs on one thread everywhere, so results are the same bit for bit for any number of workers.
"""

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from contextlib import AbstractContextManager
from importlib import import_module
from multiprocessing import get_context
from typing import TypeVar

from threadpoolctl import threadpool_limits

Element = TypeVar("Element")
Result = TypeVar("Result")
Progress = Callable[[int, int], None]

CHUNK = 8


def run_batch(
    work: Callable[[Element], Result],
    elements: Sequence[Element],
    *,
    jobs: int = 1,
    progress: Progress | None = None,
    chunk: int = CHUNK,
) -> list[Result]:
    """Apply `work` to every element and return the results in the order of the elements.

    Parameters
    ----------
    work
        A function of a module (worker processes import it). It must turn what can go wrong with
        an element into an outcome; an exception ends the batch.
    elements
        What to work on; sent to the workers chunk by chunk.
    jobs
        Number of processes; 1 works in this one.
    progress
        Called with (done, total) after every chunk.
    chunk
        Elements per chunk.
    """
    parts = [elements[k : k + chunk] for k in range(0, len(elements), chunk)]
    results: dict[int, list[Result]] = {}
    done = 0
    for index, result in _chunk_results(work, parts, min(jobs, len(parts))):
        results[index] = result
        done += len(result)
        if progress is not None:
            progress(done, len(elements))
    return [value for index in range(len(parts)) for value in results[index]]


def _chunk_results(
    work: Callable[[Element], Result], parts: list[Sequence[Element]], jobs: int
) -> Iterator[tuple[int, list[Result]]]:
    if jobs <= 1:
        for index, part in enumerate(parts):
            with one_thread():
                result = _work_chunk(work, part)
            yield index, result
        return
    with ProcessPoolExecutor(jobs, get_context("forkserver"), _one_thread) as pool:
        try:
            yield from _as_they_finish(pool, work, parts, jobs)
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            raise


def _as_they_finish(
    pool: ProcessPoolExecutor,
    work: Callable[[Element], Result],
    parts: list[Sequence[Element]],
    jobs: int,
) -> Iterator[tuple[int, list[Result]]]:
    """Keep two chunks per worker in flight, so that memory does not grow with the batch."""
    pending: dict[Future[list[Result]], int] = {}
    following = 0
    while pending or following < len(parts):
        while following < len(parts) and len(pending) < 2 * jobs:
            pending[pool.submit(_work_chunk, work, parts[following])] = following
            following += 1
        finished, _ = wait(pending, return_when=FIRST_COMPLETED)
        for future in finished:
            yield pending.pop(future), future.result()


def _work_chunk(work: Callable[[Element], Result], part: Sequence[Element]) -> list[Result]:
    return [work(element) for element in part]


def one_thread() -> AbstractContextManager[object]:
    """Hold linear algebra to one thread: small matrices, and cores that others use too.

    Returns
    -------
    context manager
        Holds from the call on, and lets go at the end of the block.
    """
    # a library that is not loaded yet cannot be held: numpy and scipy each bring their own
    for library in ("numpy", "scipy.linalg"):
        import_module(library)
    limits: AbstractContextManager[object] = threadpool_limits(limits=1)
    return limits


def _one_thread() -> None:
    """Hold linear algebra of this worker to one thread for as long as it lives."""
    one_thread()
