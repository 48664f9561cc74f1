"""Vertices of the convex hull of complex values, frequency by frequency.

|z/p - 1| is convex in z, so over a set of responses it is largest at a vertex of their hull:
nothing else matters to the radius of any nominal p. Hulls by C. B. Barber, D. P. Dobkin,
H. Huhdanpaa, "The quickhull algorithm for convex hulls", ACM Trans. Mathematical Software 22(4),
1996, 469-483.
"""

import numpy as np
from scipy.spatial import ConvexHull, QhullError

from identkit.methods.arrays import BoolArray, ComplexArray


def hull_vertices(values: ComplexArray) -> tuple[ComplexArray, BoolArray]:
    """Return the hull's vertices at every frequency.

    Parameters
    ----------
    values
        (responses, points) complex.

    Returns
    -------
    vertices
        (most vertices, points), short columns filled up with their first vertex.
    present
        (most vertices, points) False where filled up.
    """
    columns = [_vertices(column) for column in values.T]
    most = max(len(column) for column in columns)
    vertices = np.empty((most, len(columns)), dtype=complex)
    present = np.zeros((most, len(columns)), dtype=bool)
    for k, column in enumerate(columns):
        vertices[:, k] = column[0]
        vertices[: len(column), k] = column
        present[: len(column), k] = True
    return vertices, present


def _vertices(column: ComplexArray) -> ComplexArray:
    if len(column) <= 3:
        return column
    centred = column - column.mean()
    size = np.abs(centred).max()
    if size == 0.0:
        return column[:1]
    plane = np.column_stack([centred.real, centred.imag]) / size
    try:
        return np.asarray(column[ConvexHull(plane).vertices])
    except QhullError:
        # All on a line, or nearly: keep every one.
        return column
