"""Largest reach of a plant over a whole band, not only at grid points.

The level climbs from the best point known through the intervals that the level test finds
(N. A. Bruinsma, M. Steinbuch, Systems & Control Letters 14(4), 1990, 287-293).
"""

from dataclasses import dataclass

import numpy as np

from identkit.forms.comparison import PlantComparison
from identkit.methods.arrays import FloatArray
from identkit.methods.level_crossings import LevelCrossings
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import TWO_PI
from identkit.methods.resonance_grid import resonance_grid

LEVEL_TOLERANCE = 1e-7
MOST_CLIMBS = 40
LEAST_LEVEL = 1e-100
CHECK_LEVEL, CHECK_TOLERANCE = 0.98, 1e-3
FALLBACK_SHARE = 0.02
_ZOOMS, _ZOOM_POINTS, _NARROW = 14, 17, 1e-8


@dataclass(frozen=True)
class Peak:
    """A frequency (Hz) and the ratio there.

    `exact` is False where the level test did not pass its own check and a fine grid stood in.
    """

    frequency: float
    ratio: float
    exact: bool = True


def largest_ratio(comparison: PlantComparison, weight: MagnitudeWeight, start: float) -> Peak:
    """Return the supremum of |error| / |W| over the band, to a relative 1e-7.

    Parameters
    ----------
    comparison, weight
        Plant against nominal, and the weight.
    start
        Hz, the best grid point known.

    Raises
    ------
    ArithmeticError
        If the level does not settle.
    """
    common = comparison.common
    test = comparison.level_test(weight)
    # The test's own nodes lie on every resonance of the ratio: a start near the top for nothing.
    nodes = np.append(test.nodes / TWO_PI, start)
    inside = np.clip(nodes, common.low, common.high)
    ratio = comparison.ratio(inside, weight)
    top = Peak(float(inside[np.argmax(ratio)]), float(ratio.max()))
    for _ in range(MOST_CLIMBS):
        level = top.ratio * (1.0 + LEVEL_TOLERANCE) + LEAST_LEVEL
        higher = _above(comparison, weight, test, level)
        if not higher:
            return top if _passes(test, top) else _by_grid(comparison, weight, test, top)
        top = max(higher, key=lambda peak: peak.ratio)
    raise ArithmeticError(f"the ratio still grows at {top.ratio:.4g} near {top.frequency:g} Hz")


def _passes(test: LevelCrossings, top: Peak) -> bool:
    """Check the test just below the peak found, where it has to find the peak's own flanks."""
    below = CHECK_LEVEL * top.ratio
    if below <= LEAST_LEVEL:
        return True
    edges = np.array([test.low, test.high])
    always_above = not test.at(below).size and np.all(test.gain.on_axis(edges) > below**2)
    return bool(always_above or test.mismatch(below) <= CHECK_TOLERANCE)


def _by_grid(
    comparison: PlantComparison, weight: MagnitudeWeight, test: LevelCrossings, top: Peak
) -> Peak:
    """Search a grid that resolves every pole of the ratio; return its top, or `top` if higher."""
    poles = test.gain.poles[np.isfinite(test.gain.poles) & (test.gain.poles != 0.0)]
    size = np.abs(poles)
    common = comparison.common
    grid = resonance_grid(
        common.low, common.high, size / TWO_PI, poles.real / size, share=FALLBACK_SHARE
    )
    best = int(np.argmax(comparison.ratio(grid, weight)))
    bracket = np.array([[grid[max(best - 1, 0)], grid[min(best + 1, grid.size - 1)]]])
    found = max([top, *_zoomed(comparison, weight, bracket)], key=lambda peak: peak.ratio)
    return Peak(found.frequency, found.ratio, exact=False)


def peaks_above(comparison: PlantComparison, weight: MagnitudeWeight, level: float) -> list[Peak]:
    """Return a peak of the ratio in every interval of the band where it exceeds `level`."""
    return _above(comparison, weight, comparison.level_test(weight), level)


def _above(
    comparison: PlantComparison, weight: MagnitudeWeight, test: LevelCrossings, level: float
) -> list[Peak]:
    common = comparison.common
    crossings = test.at(level) / TWO_PI
    edges = np.concatenate([[common.low], crossings, [common.high]])
    nodes = test.nodes / TWO_PI
    nodes = nodes[(nodes > common.low) & (nodes < common.high)]
    tried = np.concatenate([np.sqrt(edges[1:] * edges[:-1]), edges, nodes])
    above = tried[comparison.ratio(tried, weight) > level]
    if not above.size:
        return []
    # A near miss of the axis splits an interval; a bracket ends at the next edge outside it.
    left = edges[np.maximum(np.searchsorted(edges, above, "left") - 1, 0)]
    right = edges[np.minimum(np.searchsorted(edges, above, "right"), edges.size - 1)]
    return _zoomed(comparison, weight, np.unique(np.column_stack([left, right]), axis=0))


def _zoomed(
    comparison: PlantComparison, weight: MagnitudeWeight, brackets: FloatArray
) -> list[Peak]:
    """Narrow every bracket (rows, 2) around its highest point, eightfold at a time."""
    for _ in range(_ZOOMS):
        points = np.linspace(brackets[:, 0], brackets[:, 1], _ZOOM_POINTS, axis=1)
        ratio = comparison.ratio(points.ravel(), weight).reshape(points.shape)
        best = np.argmax(ratio, axis=1)
        rows = np.arange(len(points))
        brackets = np.column_stack(
            [points[rows, np.maximum(best - 1, 0)], points[rows, np.minimum(best + 1, 16)]]
        )
        if np.all(np.diff(brackets, axis=1) <= _NARROW * brackets[:, 1:]):
            break
    return [Peak(float(points[row, at]), float(ratio[row, at])) for row, at in enumerate(best)]
