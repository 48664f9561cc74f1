"""Modal assurance criterion: how alike two mode shapes are, whatever their scaling.

Source: R. J. Allemang and D. L. Brown, "A correlation coefficient for modal vector analysis",
Proceedings of the 1st International Modal Analysis Conference, 1982, 110-116.
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray


def modal_assurance(
    first: FloatArray | ComplexArray, second: FloatArray | ComplexArray
) -> FloatArray:
    r"""Return the modal assurance criterion of every pair of shapes (Allemang and Brown 1982).

    .. math:: |a^H b|^2 / (a^H a \cdot b^H b)

    Parameters
    ----------
    first
        (shapes, places) mode shapes, real or complex, any unit.
    second
        (other shapes, places).

    Returns
    -------
    FloatArray
        (shapes, other shapes) between 0 (orthogonal) and 1 (one a multiple of the other); NaN
        for a shape that is zero everywhere.

    Notes
    -----
    Says nothing for shapes known at a single place, where it is always 1.
    """
    a = np.atleast_2d(first)
    b = np.atleast_2d(second)
    cross = np.abs(a.conj() @ b.T) ** 2
    size = np.outer((np.abs(a) ** 2).sum(axis=1), (np.abs(b) ** 2).sum(axis=1))
    alike = np.full(size.shape, np.nan)
    np.divide(cross, size, out=alike, where=size > 0.0)
    return alike
