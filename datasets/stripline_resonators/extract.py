"""Cut the stripline resonances out of the measured two-port files; see README.md.

Usage: python extract.py FOLDER, where FOLDER is doc/source/examples/qfactor/data of the scikit-rf
1.5.0 source distribution.
"""

import sys
from pathlib import Path

import numpy as np

LENGTHS_MM = (36, 72, 144)
WINDOWS_GHZ = {2: (1.75, 2.25), 4: (3.75, 4.25)}
S21_COLUMNS = (3, 4)


def main(source: Path, target: Path) -> None:
    """Write one text file per resonator and resonance."""
    for length in LENGTHS_MM:
        table = np.loadtxt(source / f"resonator_{length}mm.s2p", comments=("!", "#"))
        for near, (low, high) in WINDOWS_GHZ.items():
            inside = (table[:, 0] >= low * 1e9) & (table[:, 0] <= high * 1e9)
            columns = table[inside][:, (0, *S21_COLUMNS)]
            np.savetxt(
                target / f"{length}mm_{near}GHz.csv",
                columns,
                fmt=("%.1f", "%.9e", "%.9e"),
                delimiter=",",
                header="frequency_hz,real,imag",
                comments="",
            )


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(__file__).parent)
