"""Frequency grid as dense as the resonances on it ask for.

Near a resonance of frequency f_k and damping ratio z_k a response changes over about z_k f_k, away
from it over the distance to it. The wanted step h(f) = share * min_k hypot(z_k f_k, f - f_k) is met
by equal steps of the integral of 1/h (equidistribution: C. de Boor, "Good approximation by splines
with variable knots", in *Spline Functions and Approximation Theory*, Birkhaeuser 1973, 57-72).
"""

import numpy as np

from identkit.methods.arrays import FloatArray

SHARE = 0.25
COARSEST = 0.02
SAME = 1e-9


def resonance_grid(
    low: float,
    high: float,
    resonance: FloatArray,
    damping: FloatArray,
    lines: FloatArray | None = None,
    share: float = SHARE,
) -> FloatArray:
    """Return a grid over [low, high] that resolves every resonance, with `lines` joined in.

    Parameters
    ----------
    low, high
        Hz, 0 < low < high.
    resonance, damping
        (resonances,) Hz and damping ratios (their size counts, so right half-plane ones are fine).
    lines
        (lines,) Hz, further frequencies to keep, such as the measured ones; those outside the band
        are dropped.
    share
        Step as a share of the local width.
    """
    step = _Step(np.asarray(resonance), np.abs(np.asarray(damping)), share)
    own = _marched(low, high, step)
    kept = np.zeros(0) if lines is None else np.asarray(lines, dtype=float)
    grid = np.unique(np.concatenate([own, kept[(kept >= low) & (kept <= high)]]))
    distinct = np.concatenate([[True], np.diff(grid) > SAME * grid[1:]])
    return np.asarray(grid[distinct], dtype=float)


class _Step:
    """Wanted step at any frequency; only the nearest resonances of each kind can matter."""

    def __init__(self, resonance: FloatArray, damping: FloatArray, share: float) -> None:
        order = np.argsort(resonance)
        self.resonance = resonance[order]
        self.width = np.maximum(damping[order], 1e-5) * self.resonance
        self.share = share

    def __call__(self, frequency: FloatArray) -> FloatArray:
        step = COARSEST * frequency
        for block in np.array_split(np.arange(self.resonance.size), self.resonance.size // 512 + 1):
            if block.size:
                apart = frequency[:, None] - self.resonance[block]
                local = np.hypot(apart, self.width[block]).min(axis=1)
                step = np.minimum(step, self.share * local)
        return np.asarray(step, dtype=float)


def _marched(low: float, high: float, step: _Step) -> FloatArray:
    """Refine a geometric base grid until it resolves the step, then space points equally in it."""
    inside = step.resonance[(step.resonance > low) & (step.resonance < high)]
    base = np.unique(np.concatenate([np.geomspace(low, high, 400), inside]))
    for _ in range(30):
        wanted = step(base)
        gaps = np.diff(base)
        coarse = gaps > 2.0 * np.minimum(wanted[1:], wanted[:-1])
        if not coarse.any():
            break
        base = np.sort(np.concatenate([base, 0.5 * (base[1:] + base[:-1])[coarse]]))
    density = 1.0 / step(base)
    steps = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]) * np.diff(base))])
    count = int(np.ceil(steps[-1])) + 1
    grid = np.interp(np.linspace(0.0, steps[-1], count), steps, base)
    grid[0], grid[-1] = low, high
    return np.asarray(grid, dtype=float)
