"""Estimate the response between two seismometers block by block; see README.md.

Usage: python extract.py FOLDER, where FOLDER is obspy/signal/tests/data of the obspy 1.5.1 source
distribution; needs obspy to unpack the recordings.
"""

import sys
from pathlib import Path

import numpy as np
from obspy import read
from scipy import signal

BLOCKS = 12
SEGMENT = 4096
BAND_HZ = (0.14, 56.0)
LINES = 160


def chosen_lines(frequency: np.ndarray) -> np.ndarray:
    """Return lines spread evenly in log frequency, never neighbours (a Hann window ties those)."""
    wanted = np.geomspace(*BAND_HZ, LINES)
    nearest = np.unique(np.round(wanted / frequency[1]).astype(int))
    kept = [nearest[0]]
    for line in nearest[1:]:
        if line - kept[-1] > 2:
            kept.append(line)
    return np.array(kept)


def block_table(known: np.ndarray, other: np.ndarray, rate: float) -> np.ndarray:
    """Return frequency, real part, imaginary part and coherence of one block."""
    settings = {
        "fs": rate,
        "window": "hann",
        "nperseg": SEGMENT,
        "noverlap": 0,
        "detrend": "linear",
    }
    frequency, cross = signal.csd(known, other, **settings)
    _, auto = signal.welch(known, **settings)
    _, coherence = signal.coherence(known, other, **settings)
    response = cross / auto
    lines = chosen_lines(frequency)
    columns = np.column_stack([frequency, response.real, response.imag, coherence])
    return columns[lines]


def main(source: Path, target: Path) -> None:
    """Write one text file per block."""
    known, other = (read(source / name)[0] for name in _recordings(source))
    rate = known.stats.sampling_rate
    size = known.stats.npts // BLOCKS
    for block in range(BLOCKS):
        part = slice(block * size, (block + 1) * size)
        table = block_table(known.data[part].astype(float), other.data[part].astype(float), rate)
        np.savetxt(
            target / f"block_{block + 1:02d}.csv",
            table,
            fmt=("%.8f", "%.8f", "%.8f", "%.9f"),
            delimiter=",",
            header="frequency_hz,real,imag,coherence",
            comments="",
        )


def _recordings(source: Path) -> tuple[str, str]:
    (known,) = (path for path in source.glob("ref_*") if path.name != "ref_unknown")
    return known.name, "ref_unknown"


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(__file__).parent)
