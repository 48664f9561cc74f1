"""How much reading with all checks costs over bare parsing: 288 files of 1200 points.

Run ``python tests/benchmarks/read_campaign.py``; prints seconds and the ratio of the two, the best
of three in one run. The values are invented.
"""

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from identkit.readers.campaign import read_responses


def write(folder):
    rng = np.random.default_rng(1)
    frequency = np.geomspace(50.0, 22000.0, 1200)
    for k in range(288):
        values = rng.normal(size=(1200, 2))
        table = np.column_stack([frequency, values, rng.uniform(0.5, 1.0, 1200)])
        header = "frequency_hz,real,imag,coherence"
        np.savetxt(folder / f"U{k}.csv", table, delimiter=",", header=header, comments="")


def best(work):
    times = []
    for _ in range(3):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def main():
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write(folder)
        files = sorted(folder.iterdir())
        bare = best(lambda: [np.loadtxt(file, delimiter=",", skiprows=1) for file in files])
        whole = best(lambda: read_responses("{unit}.csv", folder=folder, averages=32))
    ratio = whole / bare
    sys.stdout.write(f"bare {bare:.2f} s, read_responses {whole:.2f} s, ratio {ratio:.2f}\n")


if __name__ == "__main__":
    main()
