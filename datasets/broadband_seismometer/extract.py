"""Thin out the stored reference response of a broadband seismometer; see README.md.

Usage: python extract.py FOLDER, where FOLDER is obspy/signal/tests/data of the obspy 1.5.1 source
distribution.
"""

import sys
from pathlib import Path

import numpy as np

LINES_KEPT_BELOW_HZ = 3.0
THIN_ABOVE = 20


def main(source: Path, target: Path) -> None:
    """Keep every line below 3 Hz and every twentieth above it."""
    (path,) = source.glob("*.refResp")
    table = np.loadtxt(path)
    line = np.arange(len(table))
    kept = (table[:, 0] < LINES_KEPT_BELOW_HZ) | (line % THIN_ABOVE == 0)
    np.savetxt(
        target / "reference_response.csv",
        table[kept],
        fmt="%.10f",
        delimiter=",",
        header="frequency_hz,magnitude,phase_rad",
        comments="",
    )


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(__file__).parent)
