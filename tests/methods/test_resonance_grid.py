import numpy as np
import pytest

from identkit.methods.curve_thinning import thinned
from identkit.methods.resonance_grid import resonance_grid


def test_steps_follow_the_nearest_resonance() -> None:
    resonance, damping = np.array([500.0, 503.0, 9000.0]), np.array([0.01, -0.002, 0.03])
    grid = resonance_grid(50.0, 22e3, resonance, damping, share=0.25)
    assert grid[0] == 50.0
    assert grid[-1] == 22e3
    middle = np.sqrt(grid[1:] * grid[:-1])
    wide = np.hypot(middle[:, None] - resonance, np.abs(damping) * resonance).min(axis=1)
    wanted = np.minimum(0.25 * wide, 0.02 * middle)
    assert np.all(np.diff(grid) <= 1.3 * wanted)
    assert grid.size < 1000


def test_lines_are_kept_inside_the_band_only() -> None:
    lines = np.array([10.0, 60.123, 61.5, 30e3])
    grid = resonance_grid(50.0, 22e3, np.zeros(0), np.zeros(0), lines)
    assert np.isin([60.123, 61.5], grid).all()
    assert grid.min() == 50.0
    assert np.all(np.diff(grid) > 0.0)


@pytest.mark.parametrize("tolerance", [0.5, 0.05, 0.001])
def test_thinned_curve_interpolates_within_the_tolerance(tolerance: float) -> None:
    x = np.linspace(0.0, 6.0, 2000)
    y = np.sin(3.0 * x) + np.abs(x - 2.0)
    keep = thinned(x, y, tolerance)
    assert keep[0]
    assert keep[-1]
    assert np.max(np.abs(np.interp(x, x[keep], y[keep]) - y)) <= tolerance
    assert keep.sum() < 400
