"""All measured responses as nested bands around the nominal, never as a tangle of curves."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, MultipleLocator

from identkit.figures import labels
from identkit.figures.frequency_axis import log_frequency_axis
from identkit.figures.style import (
    ALARM,
    BANDS,
    INK,
    NOMINAL,
    WIDE,
    Layout,
    clipped,
    in_house_style,
    new_figure,
)
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import ComplexArray, FloatArray

PERCENTILES = (0.0, 5.0, 25.0, 75.0, 95.0, 100.0)
POINTS = 360


@dataclass(frozen=True)
class ResponsesFan:
    """Bands of magnitude and phase over all responses.

    Attributes
    ----------
    frequency
        (points,) Hz.
    magnitude
        (percentiles, points) dB.
    ratio
        (percentiles, points) magnitude relative to the reference, dB.
    phase
        (percentiles, points) degrees, around the reference's phase.
    reference_magnitude, reference_phase
        (points,) of the nominal where there is one, else the median.
    reference_name
        What the reference is.
    highlight_magnitude, highlight_ratio, highlight_phase
        (points,) of one response shown by itself; NaN where none is.
    highlight_name
        Which response that is.
    count
        Number of responses in the bands.
    unit
        Unit of the response.
    """

    frequency: FloatArray
    magnitude: FloatArray
    ratio: FloatArray
    phase: FloatArray
    reference_magnitude: FloatArray
    reference_phase: FloatArray
    reference_name: str
    highlight_magnitude: FloatArray
    highlight_ratio: FloatArray
    highlight_phase: FloatArray
    highlight_name: str
    count: int
    unit: str


def pick_responses_fan(
    responses: Gridded,
    *,
    nominal_frequency: FloatArray | None = None,
    nominal_response: ComplexArray | None = None,
    highlight: str = "",
) -> ResponsesFan:
    """Pick percentile bands over all responses on a common frequency axis.

    Parameters
    ----------
    responses
        The measured responses, on one grid or several.
    nominal_frequency, nominal_response
        (points,) Hz and the nominal's response there; the median stands in where not given.
    highlight
        Id of a response to show by itself.

    Returns
    -------
    ResponsesFan
        Scalar plants; of matrix plants the first channel pair.
    """
    parts = datasets(responses)
    frequency = _common_frequency(parts)
    measured = np.vstack([_on(frequency, part) for part in parts])
    if nominal_frequency is not None and nominal_response is not None:
        reference = _interpolated(frequency, nominal_frequency, nominal_response)
        name = "nominal"
    else:
        reference, name = _median_response(frequency, measured), "median"
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = measured / reference
    base_phase = np.degrees(np.unwrap(np.angle(reference)))
    at, shown = _find(parts, highlight)
    blank = np.full(frequency.shape, np.nan + 0j)
    one, one_relative = (measured[at], relative[at]) if at >= 0 else (blank, blank)
    return ResponsesFan(
        frequency=frequency,
        magnitude=_percentiles(_decibels(measured)),
        ratio=_percentiles(_decibels(relative)),
        phase=base_phase + _percentiles(np.degrees(np.angle(relative))),
        reference_magnitude=_decibels(reference),
        reference_phase=base_phase,
        reference_name=name,
        highlight_magnitude=_decibels(one),
        highlight_ratio=_decibels(one_relative),
        highlight_phase=base_phase + np.degrees(np.angle(one_relative)),
        highlight_name=shown,
        count=len(measured),
        unit=_unit(parts[0]),
    )


def _common_frequency(parts: Sequence[xr.Dataset]) -> FloatArray:
    lows = [float(part["frequency"].values[part["frequency"].values > 0].min()) for part in parts]
    highs = [float(part["frequency"].values.max()) for part in parts]
    points = min(POINTS, max(part.sizes["frequency"] for part in parts))
    return np.geomspace(min(lows), max(highs), points)


def _on(frequency: FloatArray, part: xr.Dataset) -> ComplexArray:
    """Return the measured points nearest to `frequency`; NaN outside the part's own grid."""
    own = part["frequency"].values
    values = part["frequency_response"].values[:, 0, 0, :]
    if "usable_mask" in part:
        values = np.where(part["usable_mask"].values[:, 0, 0, :], values, np.nan)
    nearest = np.abs(np.log(np.maximum(own, 1e-300))[:, None] - np.log(frequency)).argmin(axis=0)
    inside = (frequency >= own.min() * 0.999) & (frequency <= own.max() * 1.001)
    return np.where(inside, values[:, nearest], np.nan + 0j)


def _interpolated(frequency: FloatArray, known: FloatArray, response: ComplexArray) -> ComplexArray:
    magnitude = np.interp(np.log(frequency), np.log(known), np.log(np.abs(response)))
    phase = np.interp(np.log(frequency), np.log(known), np.unwrap(np.angle(response)))
    return np.asarray(np.exp(magnitude + 1j * phase), dtype=complex)


def _median_response(frequency: FloatArray, measured: ComplexArray) -> ComplexArray:
    """Return the median of both parts, interpolated where every response lacks the point."""
    real, imaginary = (_percentiles(part, (50.0,))[0] for part in (measured.real, measured.imag))
    middle = np.asarray(real + 1j * imaginary, dtype=complex)
    known = np.isfinite(middle) & (middle != 0.0)
    if known.sum() < 2 or known.all():
        return middle
    return _interpolated(frequency, frequency[known], middle[known])


def _percentiles(values: FloatArray, at: Sequence[float] = PERCENTILES) -> FloatArray:
    """Return percentiles over responses, ignoring missing points; NaN where all are missing."""
    result = np.full((len(at), values.shape[1]), np.nan)
    known = np.isfinite(values).any(axis=0)
    result[:, known] = np.nanpercentile(values[:, known], at, axis=0)
    return result


def _decibels(values: ComplexArray) -> FloatArray:
    magnitude = np.abs(values)
    floor = np.where(magnitude > 0.0, magnitude, np.nan)
    return np.asarray(20.0 * np.log10(floor), dtype=float)


def _find(parts: Sequence[xr.Dataset], highlight: str) -> tuple[int, str]:
    ids = [str(name) for part in parts for name in part["response"].values]
    if highlight not in ids:
        return -1, ""
    names = [str(name) for part in parts for name in labels.short_names(part)]
    return ids.index(highlight), names[ids.index(highlight)]


def _unit(part: xr.Dataset) -> str:
    output, drive = part.attrs.get("output_unit", ""), part.attrs.get("input_unit", "")
    return f"{output}/{drive}" if output and drive else str(output)


@in_house_style
def draw_responses_fan(picked: ResponsesFan, layout: Layout = WIDE) -> Figure:
    """Draw magnitude, magnitude relative to the reference, and phase, as nested bands."""
    figure = new_figure(layout, 6.6 if layout.is_narrow else 6.8)
    magnitude, ratio, phase = figure.subplots(3, 1, sharex=True, height_ratios=(4, 3, 3))
    nothing = np.zeros(picked.frequency.shape)
    _panel(magnitude, picked, picked.magnitude, picked.reference_magnitude)
    _panel(ratio, picked, picked.ratio, nothing)
    _panel(phase, picked, picked.phase, picked.reference_phase)
    if picked.highlight_name:
        shown = (picked.highlight_magnitude, picked.highlight_ratio, picked.highlight_phase)
        for axes, values in zip((magnitude, ratio, phase), shown, strict=True):
            axes.plot(picked.frequency, values, color=ALARM, lw=0.9)
    magnitude.set_ylabel(f"dB re 1 {clipped(picked.unit)}".rstrip())
    ratio.set_ylabel(f"dB re {picked.reference_name}")
    phase.set_ylabel("phase, degrees")
    magnitude.yaxis.set_major_locator(MaxNLocator(6))
    ratio.yaxis.set_major_locator(MaxNLocator(5))
    phase.yaxis.set_major_locator(_phase_locator(picked.phase))
    low, high = float(picked.frequency[0]), float(picked.frequency[-1])
    for axes in (magnitude, ratio):
        log_frequency_axis(axes, low, high, layout, label=False)
    log_frequency_axis(phase, low, high, layout)
    _legend(magnitude, picked, layout)
    return figure


def _panel(
    axes: Axes, picked: ResponsesFan, percentiles: FloatArray, reference: FloatArray
) -> None:
    _bands(axes, picked.frequency, percentiles)
    axes.plot(picked.frequency, reference, color=NOMINAL, lw=1.4)


def _bands(axes: Axes, frequency: FloatArray, percentiles: FloatArray) -> None:
    for depth, colour in enumerate(BANDS):
        axes.fill_between(
            frequency, percentiles[depth], percentiles[-1 - depth], color=colour, lw=0
        )


def _phase_locator(phase: FloatArray) -> MultipleLocator:
    span = float(np.nanmax(phase) - np.nanmin(phase)) if np.isfinite(phase).any() else 360.0
    return MultipleLocator(next((s for s in (45, 90, 180, 360) if span / s <= 6), 720))


def _legend(axes: Axes, picked: ResponsesFan, layout: Layout) -> None:
    names = ("all", "90 %", "50 %")
    handles: list[Artist] = [
        axes.fill_between([], [], color=colour, lw=0, label=name)
        for colour, name in zip(BANDS, names, strict=True)
    ]
    handles += axes.plot([], [], color=NOMINAL, lw=1.5, label=picked.reference_name)
    if picked.highlight_name:
        handles += axes.plot([], [], color=ALARM, lw=0.9, label=clipped(picked.highlight_name, 30))
    title = axes.set_title(f"{picked.count} measured responses", color=INK)
    title.set_fontweight("bold")
    axes.legend(handles=handles, loc="lower left", ncols=2 if layout.is_narrow else 1)
