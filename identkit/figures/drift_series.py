"""One series over the units made: its values, and how much of each chart's limit they use up."""

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.figure import Figure
from scipy.stats import norm, t

from identkit.figures.drift_axes import mark_lots, mark_units, shade_baseline
from identkit.figures.style import (
    ALARM,
    FLOOR,
    INK,
    NOMINAL,
    SOFT_INK,
    WEIGHT,
    WIDE,
    Layout,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.stages.drift_signals import natural

_WORDS = {
    "modal_frequency": ("modal frequency, Hz", 1.0),
    "damping_ratio": ("damping ratio", 1.0),
    "reach": ("largest reach", 1.0),
}
_LINES = {
    "individual": (SOFT_INK, "-"),
    "lot mean": (WEIGHT, (0, (4, 1.5))),
    "moving average": (NOMINAL, "-"),
    "cumulative sum": (FLOOR, (0, (1, 1))),
}


@dataclass(frozen=True, eq=False)
class DriftSeries:
    """One series.

    Attributes
    ----------
    title, quantity
        Name, and what the vertical axis shows.
    units, lots
        Of every point.
    value, value_error
        (points,) natural unit; 1 standard deviation of the known error.
    centre, low, high
        Mean of the reference and limits of an individual, natural unit.
    baseline, left_out
        (points,) points of the baseline, and those of them that do not belong.
    change, candidates, until
        First point after the change (-1 for none), range that holds it, first point back or -1.
    shares
        (points,) share of its limit that each statistic uses, by name.
    """

    title: str
    quantity: str
    units: tuple[str, ...]
    lots: tuple[str, ...]
    value: FloatArray
    value_error: FloatArray
    centre: float
    low: float
    high: float
    baseline: BoolArray
    left_out: BoolArray
    change: int
    candidates: tuple[int, int]
    until: int
    shares: dict[str, FloatArray]


def pick_drift_series(
    charted: xr.Dataset, series: int, candidates: tuple[int, int] = (-1, -1), until: int = -1
) -> DriftSeries:
    """Return one series of charted points.

    Parameters
    ----------
    charted
        As made by `chart_new_units`.
    series
        Index along `series`.
    candidates, until
        Range that holds the change, and first point back.
    """
    one = charted.isel(series=series)
    mean, deviation = float(one["reference_mean"]), float(one["point_deviation"])
    count = int(one["in_reference"].values.sum())
    limit = charted.attrs["individuals_limit"]
    wide = t.isf(norm.sf(limit), max(count - 1, 1)) * deviation * np.sqrt(1.0 + 1.0 / max(count, 1))
    if bool(one["autocorrelation_modelled"]):
        wide = float("nan")  # each point then has a limit of its own, around what its memory says
    quantity = str(one["quantity"].values)
    words, scale = _WORDS.get(quantity, (f"{quantity.replace('_', ' ')}, share of usual", 0.0))
    factor = 1.0 / float(one["reference_value"]) if scale == 0.0 else scale
    values = one["deviation"].values
    error = np.sqrt(one["error_variance"].values)

    def shown(x: FloatArray | float) -> FloatArray:
        return natural(charted, series, x) * factor

    return DriftSeries(
        str(one["series"].values).replace("_", " "),
        words,
        tuple(charted["unit"].values.astype(str)),
        tuple(charted["lot"].values.astype(str)),
        shown(values),
        np.abs(shown(values + error) - shown(values)),
        float(shown(mean)),
        float(shown(mean - wide)),
        float(shown(mean + wide)),
        one["in_baseline"].values,
        one["in_baseline"].values & ~one["in_reference"].values & np.isfinite(values),
        int(one["change_at"]),
        candidates,
        until,
        limit_shares(charted, series),
    )


def limit_shares(charted: xr.Dataset, series: int) -> dict[str, FloatArray]:
    """Return by chart the share of its limit that the statistic of a series uses at each point."""
    one, limits = charted.isel(series=series), charted.attrs
    sums = np.fmax(one["cusum_up"].values, one["cusum_down"].values)
    return {
        "individual": np.abs(one["score"].values) / limits["individuals_limit"],
        "lot mean": np.abs(one["lot_score"].values) / limits["individuals_limit"],
        "moving average": np.abs(one["ewma"].values) / limits["ewma_limit"],
        "cumulative sum": sums / limits["cusum_limit"],
    }


@in_house_style
def draw_drift_series(picked: DriftSeries, layout: Layout = WIDE) -> Figure:
    """Draw the values with the limit of an individual, and below the shares of all limits."""
    figure = new_figure(layout, 6.2 if layout.is_narrow else 5.2)
    top, bottom = figure.subplots(2, 1, sharex=True, height_ratios=(3, 2))
    at = np.arange(len(picked.units))
    for axes in (top, bottom):
        shade_baseline(axes, picked.baseline.tolist())
        axes.grid(axis="x", visible=False)
    _draw_values(top, picked, at, layout)
    mark_lots(top, picked.lots)
    for name, share in picked.shares.items():
        colour, style = _LINES[name]
        inside = np.where(picked.baseline, np.nan, share)
        if np.isfinite(inside).any():
            bottom.plot(at, inside, color=colour, ls=style, lw=1.4, label=name)
    bottom.axhline(1.0, color=ALARM, lw=1.2)
    bottom.set_ylabel("share of its limit")
    bottom.set_ylim(0.0, 1.3 * max(bottom.get_ylim()[1], 1.0))
    bottom.legend(loc="upper left", ncols=2 if layout.is_narrow else 4)
    mark_units(bottom, picked.units, layout)
    return figure


def _draw_values(axes: Any, picked: DriftSeries, at: IntArray, layout: Layout) -> None:
    first, last = picked.candidates
    if first >= 0 and picked.change >= 0:
        axes.axvspan(first - 0.9, last - 0.1, color=WEIGHT, alpha=0.22, lw=0, label="change, 95 %")
    axes.axhline(picked.centre, color=INK, lw=0.9)
    for limit in (picked.low, picked.high):
        if np.isfinite(limit):
            axes.axhline(limit, color=ALARM, lw=1.2)
            axes.annotate(
                "limit of a single unit",
                (0.0, limit),
                xycoords=("axes fraction", "data"),
                xytext=(4, 3 if limit < picked.centre else -10),
                textcoords="offset points",
                color=ALARM,
                fontsize="small",
            )
    stop = picked.until if picked.until >= 0 else len(at)
    moved = (at >= picked.change) & (at < stop) if picked.change >= 0 else at < 0
    kept = ~picked.left_out & ~moved
    axes.errorbar(at, picked.value, picked.value_error, fmt="none", ecolor=SOFT_INK, lw=0.9)
    axes.plot(at[kept], picked.value[kept], "o", ms=4.5, color=NOMINAL, label="unit")
    axes.plot(at[moved], picked.value[moved], "D", ms=5.0, color=WEIGHT, label="since the change")
    if picked.left_out.any():
        axes.plot(
            at[picked.left_out],
            picked.value[picked.left_out],
            "x",
            ms=6,
            color=INK,
            label="not of the baseline",
        )
    axes.set_ylabel(picked.quantity)
    axes.margins(y=0.12)
    columns = 2 if layout.is_narrow else 4
    axes.legend(loc="lower center", bbox_to_anchor=(0.5, 1.06), ncols=columns)
