"""What the pictures of drift share: units along the horizontal axis, lots and the baseline."""

from collections.abc import Sequence
from typing import Any

import numpy as np

from identkit.figures.style import RULE, SOFT_INK, Layout, clipped

_MOST_NAMES = {"wide": 26, "narrow": 9}


def mark_units(axes: Any, units: Sequence[str], layout: Layout) -> None:
    """Name units along the horizontal axis, as many as there is room for."""
    count = len(units)
    step = max(1, -(-count // _MOST_NAMES[layout.name]))
    at = list(range(0, count, step))
    axes.set_xticks(at, [clipped(units[k], 10) for k in at], rotation=90)
    axes.set_xlim(-0.7, count - 0.3)


def mark_lots(axes: Any, lots: Sequence[str]) -> None:
    """Draw a line where the lot changes and name each lot above the axes."""
    if not any(lots):
        return
    starts = [0] + [k for k in range(1, len(lots)) if lots[k] != lots[k - 1]]
    if len(starts) > 16:
        return
    for start in starts:
        if start:
            axes.axvline(start - 0.5, color=SOFT_INK, lw=0.7, ls=(0, (1, 2)))
        axes.annotate(
            f"lot {clipped(lots[start], 8)}" if len(starts) < 9 else clipped(lots[start], 4),
            (start - 0.4, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 3),
            textcoords="offset points",
            color=SOFT_INK,
            fontsize="small",
        )


def shade_baseline(axes: Any, inside: Sequence[bool]) -> None:
    """Shade the units of the baseline."""
    rows = np.flatnonzero(inside)
    if rows.size:
        axes.axvspan(rows[0] - 0.5, rows[-1] + 0.5, color=RULE, alpha=0.45, lw=0, zorder=0)
