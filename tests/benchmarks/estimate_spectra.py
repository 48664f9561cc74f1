"""Throughput of averaged spectra against scipy.signal, and memory along the record.

Run by hand: ``python tests/benchmarks/estimate_spectra.py``. Both compute the same nine spectra of
three channels (Hann, half overlap, mean removed); ratios of the best of several runs in one go.
"""

import os
import sys
import time
import tracemalloc

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
from scipy import signal

from identkit.methods.averaged_spectra import SpectrumAverager, averaged_spectra

PERIOD = 2e-5
RUNS = 5


def ours(record, segment):
    """Return the densities of all pairs."""
    return averaged_spectra(record, PERIOD, segment).density


def theirs(record, segment):
    """Return the same by scipy.signal.csd, the upper pairs only."""
    return [
        signal.csd(record[j], record[i], 1 / PERIOD, nperseg=segment)[1]
        for i in range(3)
        for j in range(i + 1)
    ]


def best(work, *arguments):
    """Return the shortest time of several runs, s."""
    times = []
    for _ in range(RUNS):
        start = time.perf_counter()
        work(*arguments)
        times.append(time.perf_counter() - start)
    return min(times)


def peak_memory(chunks):
    """Return the peak of memory, MB, when so many chunks of 131072 samples go by."""
    chunk = np.random.default_rng(2).standard_normal((3, 1 << 17))
    averager = SpectrumAverager(3, 4096, PERIOD)
    tracemalloc.start()
    for _ in range(chunks):
        averager.add(chunk)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak / 1e6


def main():
    record = np.random.default_rng(1).standard_normal((3, 1 << 20))
    for segment in (1024, 4096, 16_384):
        mine, other = best(ours, record, segment), best(theirs, record, segment)
        sys.stdout.write(
            f"segments of {segment}: {mine:.3f} s against {other:.3f} s with scipy.signal.csd, "
            f"{mine / other:.2f} times the time\n"
        )
    for chunks in (4, 40):
        sys.stdout.write(
            f"{chunks * (1 << 17)} samples in chunks: peak {peak_memory(chunks):.1f} MB\n"
        )


if __name__ == "__main__":
    main()
