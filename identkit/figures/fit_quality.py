"""How well the modal model explains each response, and the worst fit in full."""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from identkit.figures.frequency_axis import log_frequency_axis, ratio_axis
from identkit.figures.labels import Groups, groups_of, natural_key, short_names, units_of
from identkit.figures.style import (
    ALARM,
    BANDS,
    INK,
    NOMINAL,
    SOFT_INK,
    WIDE,
    Layout,
    clipped,
    group_style,
    in_house_style,
    new_figure,
)
from identkit.grids import Gridded, datasets
from identkit.methods.arrays import ComplexArray, FloatArray, IntArray
from identkit.methods.modal_model import modal_response
from identkit.plants import plant_parameters

RESIDUAL_95 = float(np.sqrt(-np.log(0.05)))
"""Below this, in standard errors, lie 95 % of complex Gaussian errors (Rayleigh 1880)."""


@dataclass(frozen=True)
class FitQuality:
    """Noise ratio of every fit, and the worst fit beside its response.

    Attributes
    ----------
    noise_ratio
        (responses,) reduced chi-square; NaN where the variance was estimated from residuals.
    expected
        Lowest and highest noise ratio that 95 % of sound fits have.
    units
        Names of the units, in order.
    unit
        (responses,) index of each response's unit.
    groups
        Which responses share a colour.
    worst_name
        Readable name of the worst fit.
    frequency
        (points,) Hz of the worst fit's usable points.
    measured, fitted
        (points,) magnitudes in dB.
    residual
        (points,) |measured - fitted| over the standard error of the point.
    """

    noise_ratio: FloatArray
    expected: tuple[float, float]
    units: tuple[str, ...]
    unit: IntArray
    groups: Groups
    worst_name: str
    frequency: FloatArray
    measured: FloatArray
    fitted: FloatArray
    residual: FloatArray


def pick_fit_quality(fits: xr.Dataset, responses: Gridded) -> FitQuality:
    """Pick noise ratios and the worst fit.

    Parameters
    ----------
    fits
        As written by the fit or the pair stage.
    responses
        What was fitted.
    """
    ratio = fits["noise_ratio"].values
    named = units_of(fits)
    units = sorted(set(named.tolist()), key=natural_key)
    score = np.where(np.isfinite(ratio), ratio, -np.inf)
    worst = int(score.argmax())
    frequency, measured, deviation = _points(responses, str(fits["response"].values[worst]))
    fitted = modal_response(frequency, plant_parameters(fits, worst))
    degrees = 2 * max(frequency.size, 2) - _free_parameters(fits, worst)
    half = 1.96 * np.sqrt(2.0 / max(degrees, 1))
    return FitQuality(
        noise_ratio=ratio,
        expected=(1.0 - half, 1.0 + half),
        units=tuple(units),
        unit=np.array([units.index(name) for name in named.tolist()]),
        groups=groups_of(fits, "head", "temperature", "lot"),
        worst_name=str(short_names(fits)[worst]),
        frequency=frequency,
        measured=20.0 * np.log10(np.abs(measured)),
        fitted=20.0 * np.log10(np.abs(fitted)),
        residual=np.abs(measured - fitted) / deviation,
    )


def _free_parameters(fits: xr.Dataset, at: int) -> int:
    modes = int(np.isfinite(fits["modal_frequency"].values[at]).sum())
    return 5 + 3 * modes


def _points(responses: Gridded, identifier: str) -> tuple[FloatArray, ComplexArray, FloatArray]:
    """Return frequency, response and standard error of one response's usable points."""
    for part in datasets(responses):
        if identifier not in part["response"].values:
            continue
        one = part.sel(response=identifier).isel(output=0, input=0)
        values = one["frequency_response"].values
        variance = (
            one["frequency_response_variance"].values
            if "frequency_response_variance" in one
            else np.full(values.shape, np.nan)
        )
        usable = np.isfinite(values)
        if "usable_mask" in one:
            usable &= one["usable_mask"].values
        return part["frequency"].values[usable], values[usable], np.sqrt(variance[usable])
    return np.ones(1), np.full(1, np.nan + 0j), np.ones(1)


@in_house_style
def draw_fit_quality(picked: FitQuality, layout: Layout = WIDE) -> Figure:
    """Draw noise ratios by unit, then the worst fit and its residual in standard errors."""
    figure = new_figure(layout, 7.2 if layout.is_narrow else 6.4)
    ratios, worst, residual = figure.subplots(3, 1, height_ratios=(4, 3, 2))
    _noise_ratios(ratios, picked, layout)
    _worst_fit(worst, picked, layout)
    _residual(residual, picked, layout)
    return figure


def _noise_ratios(axes: Axes, picked: FitQuality, layout: Layout) -> None:
    axes.axhspan(*picked.expected, color=BANDS[0], lw=0)
    axes.axhline(1.0, color=SOFT_INK, lw=0.7)
    count = len(picked.groups.values)
    for group, value in enumerate(picked.groups.values):
        colour, marker = group_style(group)
        chosen = (picked.groups.member == group) & np.isfinite(picked.noise_ratio)
        x = picked.unit[chosen] + (group - (count - 1) / 2.0) * 0.6 / max(count, 2)
        axes.plot(
            x,
            picked.noise_ratio[chosen],
            marker,
            color=colour,
            ms=3.4,
            mec="none",
            alpha=0.85,
            label=clipped(f"{picked.groups.name} {value}".strip()),
        )
    axes.set_title("" if layout.is_narrow else "noise ratio of every fit, by unit")
    axes.set_ylabel("noise ratio")
    axes.set_xlim(-0.8, len(picked.units) - 0.2)
    every = max(1, -(-len(picked.units) // (8 if layout.is_narrow else 26)))
    names = [clipped(name, 8) for name in picked.units[::every]]
    axes.set_xticks(range(0, len(picked.units), every), names)
    axes.tick_params(axis="x", labelsize="small")
    axes.grid(axis="x", visible=False)
    if np.isfinite(picked.noise_ratio).any():
        highest = float(np.nanmax(picked.noise_ratio))
        if highest > 4.0:
            ratio_axis(axes, min(0.7, float(np.nanmin(picked.noise_ratio))), 1.3 * highest)
    if count > 1:
        axes.legend(
            loc="lower right",
            bbox_to_anchor=(1.0, 1.0),
            ncols=min(count, 4 if layout.is_narrow else 8),
            handletextpad=0.1,
            columnspacing=0.7,
            borderpad=0.0,
        )


def _worst_fit(axes: Axes, picked: FitQuality, layout: Layout) -> None:
    axes.plot(picked.frequency, picked.measured, ".", color=BANDS[2], ms=2.4, rasterized=True)
    axes.plot(picked.frequency, picked.fitted, color=NOMINAL, lw=1.1)
    axes.set_title(f"worst fit: {clipped(picked.worst_name, 36)}")
    axes.set_ylabel("magnitude, dB")
    axes.yaxis.set_major_locator(MaxNLocator(5))
    low, high = float(picked.frequency.min()), float(picked.frequency.max())
    log_frequency_axis(axes, low, high, layout, label=False)


def _residual(axes: Axes, picked: FitQuality, layout: Layout) -> None:
    axes.axhspan(0.0, RESIDUAL_95, color=BANDS[0], lw=0)
    outside = picked.residual > RESIDUAL_95
    for chosen, colour in ((~outside, BANDS[2]), (outside, ALARM)):
        axes.plot(
            picked.frequency[chosen],
            picked.residual[chosen],
            ".",
            color=colour,
            ms=2.4,
            rasterized=True,
        )
    axes.set_ylabel("residual / σ", color=INK)
    axes.set_ylim(bottom=0.0)
    low, high = float(picked.frequency.min()), float(picked.frequency.max())
    log_frequency_axis(axes, low, high, layout)
