"""House style: palette, page widths, frequency axes; what every picture shares."""

import functools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, ParamSpec, TypeVar

import matplotlib
import numpy as np
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure

PAPER = "#fbfcfa"
INK = "#1c2b33"
SOFT_INK = "#5a6b73"
RULE = "#d5dcdc"
NOMINAL = "#14507a"
WEIGHT = "#c2410c"
FLOOR = "#0b8a7a"
BANDS = ("#e3ecee", "#bfd3d9", "#8fb2bd")
"""Extremes, 90 % and 50 % of the responses."""
ALARM = "#a3123f"

GROUP_COLOURS = (
    "#003d57",
    "#2cc4b8",
    "#a73202",
    "#aa66eb",
    "#eaa103",
    "#5c00a2",
    "#60241c",
    "#96b374",
)
"""Searched for the largest smallest distance under normal, deutan, protan and tritan vision.

Each also has its own marker.
"""
GROUP_MARKERS = ("o", "s", "^", "D", "v", "P", "X", "h")

REACH_COLOURS = LinearSegmentedColormap.from_list(
    "reach", ["#f4f7f2", "#cfe3dd", "#86bcbf", "#3d86a8", "#2b4f8a", "#3a1f5c"]
).with_extremes(over=WEIGHT, bad="#ffffff")
"""Light to dark in equal steps of lightness: order survives print and colour-vision deficiency."""


@dataclass(frozen=True)
class Layout:
    """How wide a picture is laid out.

    Attributes
    ----------
    name
        "wide" for desks and print, "narrow" for phones.
    width
        Inches.
    font_size
        Points.
    columns
        How many small panels stand side by side.
    """

    name: str
    width: float
    font_size: float
    columns: int

    @property
    def is_narrow(self) -> bool:
        """Whether the picture is meant for a phone."""
        return self.name == "narrow"


WIDE = Layout("wide", 9.4, 9.0, 4)
NARROW = Layout("narrow", 4.0, 8.6, 2)

_Arguments = ParamSpec("_Arguments")
_Result = TypeVar("_Result")


def house_settings(font_size: float) -> dict[Any, Any]:
    """Return the matplotlib settings of every picture for a font size in points."""
    return {
        "font.size": font_size,
        "font.family": "DejaVu Sans",
        "figure.facecolor": PAPER,
        "savefig.facecolor": PAPER,
        "axes.facecolor": PAPER,
        "axes.edgecolor": SOFT_INK,
        "axes.labelcolor": INK,
        "axes.titlesize": font_size,
        "axes.titleweight": "bold",
        "axes.titlelocation": "left",
        "axes.titlecolor": INK,
        "axes.labelsize": font_size,
        "axes.linewidth": 0.7,
        "axes.spines.top": False,
        "axes.spines.right": False,
        "axes.grid": True,
        "axes.axisbelow": True,
        "grid.color": RULE,
        "grid.linewidth": 0.6,
        "text.color": INK,
        "text.parse_math": False,
        "xtick.color": SOFT_INK,
        "ytick.color": SOFT_INK,
        "xtick.labelcolor": INK,
        "ytick.labelcolor": INK,
        "xtick.major.size": 3.0,
        "ytick.major.size": 3.0,
        "legend.frameon": False,
        "legend.fontsize": font_size * 0.95,
        "svg.fonttype": "none",
        "axes.unicode_minus": True,
        "path.simplify": True,
        "path.simplify_threshold": 0.2,
    }


def in_house_style(
    draw: Callable[_Arguments, _Result],
) -> Callable[_Arguments, _Result]:
    """Run a drawing function under the house settings; its `layout` argument sets the font."""

    @functools.wraps(draw)
    def styled(*arguments: _Arguments.args, **keywords: _Arguments.kwargs) -> _Result:
        given = [a for a in (*arguments, *keywords.values()) if isinstance(a, Layout)]
        with matplotlib.rc_context(house_settings((given or [WIDE])[0].font_size)):
            return draw(*arguments, **keywords)

    return styled


def new_figure(layout: Layout, height: float) -> Figure:
    """Return an empty figure of the layout's width and `height` inches."""
    return Figure(figsize=(layout.width, height), layout="constrained")


def clipped(text: str, most: int = 18) -> str:
    """Return at most `most` letters of a user's label, so that no label squeezes a picture flat.

    What is taken out is the middle: paths and serial numbers differ at their ends.
    """
    if len(text) <= most:
        return text
    head = most // 3
    return f"{text[:head]}…{text[len(text) - (most - 1 - head) :]}"


def frequency_label(frequency: float) -> str:
    """Return a frequency in Hz or kHz with three significant digits."""
    if not np.isfinite(frequency):
        return "unknown frequency"
    if frequency >= 1000.0:
        return f"{float(f'{frequency / 1000.0:.3g}'):g} kHz"
    return f"{float(f'{frequency:.3g}'):g} Hz"


def group_style(index: int) -> tuple[str, str]:
    """Return (colour, marker) of the `index`-th group; they repeat after eight."""
    return GROUP_COLOURS[index % len(GROUP_COLOURS)], GROUP_MARKERS[index % len(GROUP_MARKERS)]
