"""Required radius, the weight over it, the floor under it, and who sets it where."""

from collections import Counter
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from identkit.figures.frequency_axis import (
    log_edges,
    log_frequency_axis,
    mark_modes,
    ratio_axis,
)
from identkit.figures.labels import short_names, units_of
from identkit.figures.set_plants import labelled
from identkit.figures.style import (
    BANDS,
    FLOOR,
    INK,
    NOMINAL,
    PAPER,
    SOFT_INK,
    WEIGHT,
    WIDE,
    Layout,
    clipped,
    group_style,
    in_house_style,
    new_figure,
)
from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.plant_set.fields import PlantSetFields
from identkit.plant_set.response import nominal_response

ROWS = 8
"""How many units that set the radius get a row of their own."""


@dataclass(frozen=True)
class RadiusWeight:
    """Curves of the bound along frequency.

    Attributes
    ----------
    frequency
        (points,) Hz.
    radius
        (points,) smallest radius that holds every plant used.
    weight
        (points,) magnitude of the weight.
    floor
        (points,) no nominal needs less at this frequency; NaN where not computed.
    allowed
        (points,) weight the profile allows at the excess reached; NaN where there is none.
    nominal
        (points,) nominal magnitude, dB; NaN where not known.
    setter
        (points,) index into `setters` of who sets the radius; -1 where the radius floor does.
    setters
        Units, by share of the band they set, largest first.
    touch_frequency, touch_names
        (touches,) Hz and units of the plants that touch the weight.
    band
        Hz, in which everything is claimed.
    mode_names, mode_frequency
        Population modes, to read frequencies by.
    error
        What the radius measures, with its unit.
    whole
        (points,) radius at which the error is as large as the nominal: 1, or its magnitude.
    """

    frequency: FloatArray
    radius: FloatArray
    weight: FloatArray
    floor: FloatArray
    allowed: FloatArray
    nominal: FloatArray
    setter: IntArray
    setters: tuple[str, ...]
    touch_frequency: FloatArray
    touch_names: tuple[str, ...]
    band: tuple[float, float]
    mode_names: tuple[str, ...]
    mode_frequency: FloatArray
    error: str
    whole: FloatArray


def pick_radius(
    contents: PlantSetFields,
    *,
    mode_names: tuple[str, ...] = (),
    mode_frequency: FloatArray | None = None,
    floor_frequency: FloatArray | None = None,
    floor: FloatArray | None = None,
) -> RadiusWeight:
    """Pick the radii of a set, and who sets them, largest share of the band first.

    Parameters
    ----------
    contents
        The set file's contents.
    mode_names, mode_frequency
        Population modes and their frequencies in Hz.
    floor_frequency, floor
        (points,) Hz and the radius that no nominal can beat there, where it was computed.
    """
    radii = contents.radii
    frequency = radii.frequency
    owners = unit_names(contents)
    set_by = [owners.get(name, name) for name in radii.set_by]
    setters = _by_share(set_by)
    place = {name: at for at, name in enumerate(setters)}
    nearest = max((each.reach for each in contents.attribution), default=0.0)
    touches = [each for each in contents.attribution if each.reach >= 0.995 * nearest]
    nominal = nominal_response(contents, frequency)[0, 0]
    blank = np.full(frequency.shape, np.nan)
    known = floor is not None and floor_frequency is not None and np.isfinite(floor).any()
    excess = 10.0 ** (contents.certificate.optimality.excess_db / 20.0)
    return RadiusWeight(
        frequency=frequency,
        radius=radii.required_radius,
        weight=radii.weight_magnitude,
        floor=_interpolated(frequency, floor_frequency, floor) if known else blank,
        allowed=excess * radii.allowed_excess * radii.required_radius,
        nominal=20.0 * np.log10(np.abs(nominal)),
        setter=np.array([place.get(name, -1) for name in set_by], dtype=int),
        setters=tuple(setters),
        touch_frequency=np.array([each.frequency for each in touches], dtype=float),
        touch_names=tuple(owners.get(each.label, each.label) for each in touches),
        band=contents.band,
        mode_names=mode_names,
        mode_frequency=np.zeros(0) if mode_frequency is None else mode_frequency,
        error=error_label(contents),
        whole=np.abs(nominal) if contents.form == "additive" else np.ones(frequency.size),
    )


def error_label(contents: PlantSetFields) -> str:
    """Return what the radius of a scalar set measures, with its unit."""
    if contents.form == "additive":
        units = [channel.unit for channel in (*contents.outputs[:1], *contents.inputs[:1])]
        return f"error, {units[0]}/{units[1]}" if all(units) else "error, output/input"
    if contents.form == "inverse-multiplicative":
        return "error relative to the plant, 1 = 100 %"
    return "relative error, 1 = 100 %"


def readable_names(contents: PlantSetFields) -> dict[str, str]:
    """Return the readable name of every plant of a set by its response id."""
    if not contents.plants:
        return {}
    data = labelled(contents.plants)
    return dict(zip(data["response"].values.tolist(), short_names(data).tolist(), strict=True))


def unit_names(contents: PlantSetFields) -> dict[str, str]:
    """Return the unit of every plant of a set by its response id; the id where none is named."""
    if not contents.plants:
        return {}
    data = labelled(contents.plants)
    return dict(zip(data["response"].values.tolist(), units_of(data).tolist(), strict=True))


def _by_share(set_by: list[str]) -> list[str]:
    counts = Counter(name for name in set_by if name)
    return [name for name, _ in sorted(counts.items(), key=lambda item: (-item[1], item[0]))]


def _interpolated(
    frequency: FloatArray, known: FloatArray | None, values: FloatArray | None
) -> FloatArray:
    if known is None or values is None:
        return np.full(frequency.shape, np.nan)
    positive = values > 0.0
    if positive.sum() < 2:
        return np.full(frequency.shape, np.nan)
    logs = np.interp(np.log(frequency), np.log(known[positive]), np.log(values[positive]))
    return np.asarray(np.exp(logs), dtype=float)


@in_house_style
def draw_radius(picked: RadiusWeight, layout: Layout = WIDE) -> Figure:
    """Draw the nominal, the radius filled under the weight, and rows of who sets the radius."""
    rows = min(len(picked.setters), ROWS) + (len(picked.setters) > ROWS)
    height = (5.6 if layout.is_narrow else 5.2) + 0.19 * rows
    figure = new_figure(layout, height)
    nominal, radius, who = figure.subplots(
        3, 1, height_ratios=(1.5, 4.0, 0.35 + 0.25 * max(rows, 1)), sharex=True
    )
    _nominal(nominal, picked, layout)
    _radius(radius, picked, layout)
    _who(who, picked, layout)
    low, high = picked.band
    for axes in (nominal, radius):
        log_frequency_axis(axes, low, high, layout, label=False)
    log_frequency_axis(who, low, high, layout)
    return figure


def _nominal(axes: Axes, picked: RadiusWeight, layout: Layout) -> None:
    axes.plot(picked.frequency, picked.nominal, color=NOMINAL, lw=1.2)
    axes.set_ylabel("nominal, dB")
    axes.yaxis.set_major_locator(MaxNLocator(4))
    mark_modes(axes, picked.mode_names, picked.mode_frequency, picked.band, layout)


def _radius(axes: Axes, picked: RadiusWeight, layout: Layout) -> None:
    f = picked.frequency
    bottom = _bottom(picked)
    axes.fill_between(f, bottom, picked.radius, color=BANDS[1], lw=0, label="required radius")
    axes.fill_between(
        f,
        picked.radius,
        picked.weight,
        where=(picked.weight >= picked.radius).tolist(),
        color=WEIGHT,
        alpha=0.10,
        lw=0,
    )
    if np.isfinite(picked.floor).any():
        axes.plot(f, picked.floor, color=FLOOR, lw=1.0, label="floor for any nominal")
    axes.plot(f, picked.weight, color=WEIGHT, lw=1.6, label="weight")
    over = picked.radius > picked.weight * (1.0 + 1e-6)
    if over.any():
        axes.plot(f[over], picked.radius[over], ".", color=INK, ms=3, label="not held")
    _touches(axes, picked, layout)
    axes.plot(f, picked.whole, color=SOFT_INK, lw=0.7)
    axes.set_ylabel(clipped(picked.error, 40))
    curves = np.concatenate([picked.radius, picked.weight])
    ratio_axis(axes, bottom, 1.6 * float(np.nanmax(curves)))
    rising = bool(picked.weight[-1] >= picked.weight[0])
    axes.legend(loc="upper left" if rising else "upper right", ncols=1)


def _touches(axes: Axes, picked: RadiusWeight, layout: Layout) -> None:
    """Ring the places where a plant touches the weight, and name its unit."""
    if not picked.touch_frequency.size:
        return
    logs = np.log(picked.frequency)
    height = np.exp(np.interp(np.log(picked.touch_frequency), logs, np.log(picked.weight)))
    axes.plot(picked.touch_frequency, height, "o", mfc=PAPER, mec=WEIGHT, ms=4.2, zorder=4)
    named: list[float] = []
    places = zip(np.log10(picked.touch_frequency), height, picked.touch_names, strict=True)
    for x, y, name in places:
        if any(abs(x - other) < (0.16 if layout.is_narrow else 0.06) for other in named):
            continue
        named.append(float(x))
        axes.annotate(
            clipped(name, 10),
            (10.0**x, y),
            xytext=(0, 5),
            textcoords="offset points",
            ha="center",
            size="small",
            color=WEIGHT,
            bbox={"facecolor": PAPER, "edgecolor": "none", "alpha": 0.8, "pad": 0.4},
            zorder=5,
        )


def _bottom(picked: RadiusWeight) -> float:
    curves = np.concatenate([picked.radius, picked.weight])
    known = curves[np.isfinite(curves) & (curves > 0.0)]
    return 0.6 * float(known.min()) if known.size else 0.01


def _who(axes: Axes, picked: RadiusWeight, layout: Layout) -> None:
    shown = picked.setters[:ROWS]
    names = [clipped(name, 16) for name in shown]
    for row in range(len(shown)):
        _segments(axes, picked, picked.setter == row, row, group_style(row)[0])
    if len(picked.setters) > ROWS:
        _segments(axes, picked, picked.setter >= ROWS, ROWS, SOFT_INK)
        names.append(f"{len(picked.setters) - ROWS} others")
    axes.set_yticks(range(len(names)), names)
    axes.tick_params(axis="y", labelsize="small", length=0)
    axes.set_ylim(max(len(names), 1) - 0.4, -0.6)
    axes.grid(axis="y", visible=False)
    axes.spines["left"].set_visible(False)
    axes.set_title("unit that sets the radius")


def _segments(axes: Axes, picked: RadiusWeight, chosen: BoolArray, row: int, colour: str) -> None:
    """Draw one bar per run of neighbouring frequencies that the row's response sets."""
    edges = log_edges(picked.frequency)
    padded = np.concatenate([[False], np.asarray(chosen, dtype=bool), [False]])
    starts = np.flatnonzero(padded[1:] & ~padded[:-1])
    ends = np.flatnonzero(~padded[1:] & padded[:-1])
    spans = [(edges[a], edges[b] - edges[a]) for a, b in zip(starts, ends, strict=True)]
    axes.broken_barh(spans, (row - 0.32, 0.64), color=colour, lw=0)
