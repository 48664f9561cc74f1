"""Subspace identification in a process of its own (canonical variate analysis, Larimore 1990).

W. E. Larimore, Canonical variate analysis in identification, filtering and adaptive control, Proc.
29th IEEE CDC, 1990; P. Van Overschee and B. De Moor, Subspace Identification for Linear Systems,
Kluwer 1996. The computation is that of the package sippy-unipi, which prints, may end the process
and changes its inputs; so it is called here and nowhere else: ``python -m
identkit.methods.subspace_worker IN.npz OUT.npy``.
"""

import sys
import warnings

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray

_HORIZON = 50


def discrete_poles(drive: FloatArray, position: FloatArray, order: int) -> ComplexArray:
    """Return the poles of a state-space model of the given order."""
    import sippy_unipi

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model = sippy_unipi.system_identification(
            position.copy(),
            drive.copy(),
            "CVA",
            SS_fixed_order=order,
            SS_f=_HORIZON,
            SS_p=_HORIZON,
        )
    return np.asarray(np.linalg.eigvals(model.A), dtype=complex)


def main() -> None:
    """Read drive, position and order from the first file; write the poles to the second."""
    with np.load(sys.argv[1], allow_pickle=False) as given:
        poles = discrete_poles(given["drive"], given["position"], int(given["order"]))
    np.save(sys.argv[2], poles, allow_pickle=False)


if __name__ == "__main__":
    main()
