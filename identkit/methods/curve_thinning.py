"""Fewest points of a curve between which straight lines stay within a tolerance.

U. Ramer, "An iterative procedure for the polygonal approximation of plane curves", Computer
Graphics and Image Processing 1(3), 1972, 244-256; D. H. Douglas, T. K. Peucker, "Algorithms for the
reduction of the number of points required to represent a digitized line", Cartographica 10(2),
1973, 112-122. Here the distance is vertical.
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray


def thinned(x: FloatArray, y: FloatArray, tolerance: float) -> BoolArray:
    """Return which points to keep so that linear interpolation of the kept ones errs little.

    Parameters
    ----------
    x, y
        (points,) x increasing.
    tolerance
        Largest vertical distance of a dropped point, in units of y.
    """
    keep = np.zeros(x.size, dtype=bool)
    keep[[0, -1]] = True
    spans = [(0, x.size - 1)]
    while spans:
        first, last = spans.pop()
        if last - first < 2:
            continue
        inside = slice(first + 1, last)
        slope = (y[last] - y[first]) / (x[last] - x[first])
        distance = np.abs(y[inside] - y[first] - slope * (x[inside] - x[first]))
        worst = int(np.argmax(distance))
        if distance[worst] > tolerance:
            keep[first + 1 + worst] = True
            spans += [(first, first + 1 + worst), (first + 1 + worst, last)]
    return keep
