"""All series at a glance: the share of its limit that each uses, unit by unit."""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.figure import Figure

from identkit.figures.drift_axes import mark_lots, mark_units
from identkit.figures.drift_series import limit_shares
from identkit.figures.style import REACH_COLOURS, WIDE, Layout, in_house_style, new_figure
from identkit.methods.arrays import FloatArray

_SHORT = {"modal_frequency": "frequency", "damping_ratio": "damping"}


@dataclass(frozen=True, eq=False)
class DriftOverview:
    """Share of limits.

    Attributes
    ----------
    rows
        Name of every row: the series, and the multivariate chart.
    units, lots
        Of every column.
    share
        (rows, columns) largest share of a limit; NaN in the baseline.
    """

    rows: tuple[str, ...]
    units: tuple[str, ...]
    lots: tuple[str, ...]
    share: FloatArray


def pick_drift_overview(charted: xr.Dataset) -> DriftOverview | None:
    """Return the shares of all charts; None where nothing has been judged yet."""
    shares, rows = [], []
    for k in range(charted.sizes["series"]):
        parts = np.array(list(limit_shares(charted, k).values()))
        watched = charted["watched"].values[:, k]
        if watched.any():
            shares.append(np.where(watched, np.fmax.reduce(parts), np.nan))
            mode, quantity = (
                str(charted["mode"].values[k]),
                str(charted["quantity"].values[k]),
            )
            rows.append(f"{mode} {_SHORT.get(quantity, quantity)}".strip())
    if not rows:
        return None
    joint = charted["joint_statistic"].values / charted.attrs["joint_limit"]
    if np.isfinite(joint).any():
        shares.append(joint)
        rows.append("all frequencies")
    return DriftOverview(
        tuple(rows),
        tuple(charted["unit"].values.astype(str)),
        tuple(charted["lot"].values.astype(str)),
        np.array(shares),
    )


@in_house_style
def draw_drift_overview(picked: DriftOverview, layout: Layout = WIDE) -> Figure:
    """Draw one row per series and one column per unit."""
    figure = new_figure(layout, 1.4 + 0.2 * len(picked.rows))
    axes = figure.subplots()
    image = axes.imshow(
        picked.share, aspect="auto", cmap=REACH_COLOURS, vmin=0.0, vmax=1.0, interpolation="nearest"
    )
    axes.set_yticks(range(len(picked.rows)), picked.rows)
    axes.grid(visible=False)
    mark_units(axes, picked.units, layout)
    mark_lots(axes, picked.lots)
    bar = figure.colorbar(
        image, ax=axes, extend="max", location="bottom", shrink=0.5, aspect=30, pad=0.03
    )
    bar.set_label("largest share of a limit; orange: beyond it")
    return figure
