"""Rewrite the three repeated one-port sweeps as text columns; see README.md.

Usage: python extract.py FOLDER, where FOLDER is skrf/data of scikit-rf 1.5.0.
"""

import sys
from pathlib import Path

import numpy as np


def main(source: Path, target: Path) -> None:
    """Write one text file per sweep."""
    for sweep in (1, 2, 3):
        table = np.loadtxt(source / f"ro,{sweep}.s1p", comments=("!", "#"))
        np.savetxt(
            target / f"sweep_{sweep}.csv",
            table,
            fmt=("%.2f", "%.12f", "%.12f"),
            delimiter=",",
            header="Freq [GHz],real,imag",
            comments="",
        )


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(__file__).parent)
