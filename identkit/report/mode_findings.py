"""Sentences about the modes."""

from collections import defaultdict

import numpy as np
import xarray as xr

from identkit.figures.labels import natural_key, nearest_mode, spoken_unit, units_of
from identkit.figures.style import frequency_label
from identkit.methods.arrays import FloatArray
from identkit.outcomes import Outcome
from identkit.report.contents import ReportInput
from identkit.report.numbers import counted, listed, percent

SMALL_SPREAD = 1e-4
"""Relative spread below which a label is not worth a word."""
APART = 0.01
"""Chance, over the whole table, below which a lot is said to stand apart."""


def modes_sentence(given: ReportInput) -> str:
    """Return how many modes describe the population and how they spread."""
    if given.population is None:
        return ""
    spread = frequency_spread(given)
    value = given.population["population_value"].sel(quantity="modal_frequency").values
    names = given.population["mode"].values.astype(str)
    if not names.size:
        return "No mode is common to the responses."
    span = f"from {frequency_label(value.min())} to {frequency_label(value.max())}"
    sentence = f"{counted(len(names), 'mode')} describe{'s' * (len(names) == 1)} the population, "
    sentence += span if len(names) > 1 else f"at {frequency_label(value[0])}"
    if not np.isfinite(spread).any():
        return sentence + "."
    widest = int(np.nanargmax(spread))
    return (
        f"{sentence}; between plants at one temperature their frequencies spread by "
        f"{percent(np.nanmin(spread))} to {percent(np.nanmax(spread))} (one sigma, error of the "
        f"fits taken out), most for {names[widest]} at {frequency_label(value[widest])}."
    )


def label_spread_sentence(given: ReportInput) -> str:
    """Return how much of the spread of the frequencies belongs to which label."""
    if given.population is None or not given.population.sizes["mode"]:
        return ""
    chosen = given.population.sel(quantity="modal_frequency")
    parts = [
        f"{words} {_span(chosen[name].values)}"
        for words, name in (
            ("unit to unit", "unit_deviation"),
            ("head to head in a unit", "head_deviation"),
            ("repeat to repeat", "residual_deviation"),
        )
        if np.isfinite(chosen[name].values).any() and np.nanmax(chosen[name].values) > SMALL_SPREAD
    ]
    slope = chosen["temperature_slope"].values
    if np.isfinite(slope).any() and np.any(slope):
        parts.append(f"with temperature {_span(slope)} per K")
    return f"Frequencies differ (one sigma) {', '.join(parts)}." if parts else ""


def lots_sentence(given: ReportInput) -> str:
    """Return which lots stand apart from all others, in which modes and by how much."""
    if given.population is None or "lot_chance" not in given.population:
        return ""
    chance = given.population["lot_chance"].values
    effect = given.population["lot_effect"].values
    names = given.population["effect"].values.astype(str)
    found = []
    for row, lot in enumerate(given.population["lot"].values.astype(str)):
        apart = [
            f"{_effect_words(names[k])} {100 * effect[row, k]:+.2g} %"
            for k in np.flatnonzero(chance[row] < APART)
        ]
        if apart:
            found.append(f"lot {lot} in {listed(apart, 4)}")
    if not found:
        return ""
    return (
        f"Apart from the other lots: {listed(found, 3)} (Student's test over units, chance below "
        f"{percent(APART)} for the whole table)."
    )


def _effect_words(name: str) -> str:
    mode, quantity = name.split(":", 1)
    words = {"modal_frequency": "frequency", "damping_ratio": "damping"}.get(quantity, quantity)
    return words.replace("_", " ") if mode == "base" else f"{mode} {words.replace('_', ' ')}"


def _span(values: FloatArray) -> str:
    low, high = np.nanmin(values), np.nanmax(values)
    if percent(low) == percent(high):
        return percent(low)
    return f"{percent(low)} to {percent(high)}"


def frequency_spread(given: ReportInput) -> FloatArray:
    """Return each population mode's relative frequency spread between plants, one sigma."""
    if given.population is None:
        return np.zeros(0)
    chosen = given.population.sel(quantity="modal_frequency")
    parts = [
        chosen[name].values for name in ("unit_deviation", "head_deviation", "residual_deviation")
    ]
    known = np.isfinite(parts).any(axis=0)
    return np.where(known, np.sqrt(np.nansum(np.square(parts), axis=0)), np.nan)


def odd_modes_sentence(given: ReportInput) -> str:
    """Return which units to inspect: modes of their own, or far from the population's."""
    if given.modes is None or "mode_in_population" not in given.modes:
        return ""
    extra, shifted = _extra_modes(given.modes), _shifted_modes(given.modes)
    parts = []
    for unit in sorted({*extra, *shifted}, key=natural_key):
        found = []
        if unit in extra:
            verb = "is" if len(extra[unit]) == 1 else "are"
            found.append(f"{listed(extra[unit], 3)} {verb} not in the population")
        if unit in shifted:
            verb = "stands" if len(shifted[unit]) == 1 else "stand"
            found.append(f"{listed(shifted[unit], 4)} {verb} far from the population's place")
        parts.append(f"{spoken_unit(unit)} ({'; '.join(found)})")
    return f"Inspect {listed(parts, 3)}." if parts else ""


def _extra_modes(modes: xr.Dataset) -> dict[str, list[str]]:
    """Return, by unit, 'a mode near 7.15 kHz, in 3 of 12 responses,' for each extra mode."""
    extra = modes.isel(mode=~modes["mode_in_population"].values.astype(bool))
    units, found = units_of(modes), defaultdict(list)
    for at in range(extra.sizes["mode"]):
        frequency = extra["modal_frequency"].values[:, at]
        for unit in sorted(set(units[np.isfinite(frequency)].tolist())):
            own = frequency[units == unit]
            place, seen = frequency_label(float(np.nanmedian(own))), int(np.isfinite(own).sum())
            found[unit].append(f"a mode near {place}, in {seen} of {own.size} responses,")
    return dict(found)


def _shifted_modes(modes: xr.Dataset) -> dict[str, list[str]]:
    """Return, by unit, the names of modes far from the population's."""
    if "mode_outcome" not in modes:
        return {}
    hits = modes["mode_outcome"].values == Outcome.MODE_SHIFTED
    units, found = units_of(modes), defaultdict(list)
    for at, name in enumerate(modes["mode"].values.astype(str)):
        for unit in sorted(set(units[hits[:, at]].tolist())):
            found[unit].append(str(name))
    return dict(found)


def mode_near(given: ReportInput, frequency: float, otherwise: str) -> str:
    """Return the population's mode near a frequency, "" where none is near.

    Where no population was described, what the set file names stands.
    """
    if given.population is None:
        return otherwise
    names = given.population["mode"].values.astype(str).tolist()
    value = given.population["population_value"].sel(quantity="modal_frequency").values
    return nearest_mode(frequency, names, value)
