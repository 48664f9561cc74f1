"""Tables of modes, heads and fits."""

import numpy as np
import xarray as xr

from identkit.figures.labels import natural_key, short_names, units_of
from identkit.outcomes import ADVICE, Outcome, slug
from identkit.report.contents import ReportInput
from identkit.report.mode_findings import frequency_spread
from identkit.report.numbers import number, percent, with_interval
from identkit.report.table import Table, table_of


def population_table(given: ReportInput) -> Table | None:
    """Return each population mode: value, temperature slope and spread of its parameters."""
    population = given.population
    if population is None:
        return None
    spread = frequency_spread(given)
    rows = []
    for at, name in enumerate(population["mode"].values.astype(str)):
        mode = population.isel(mode=at)
        frequency, damping = (
            mode.sel(quantity="modal_frequency"),
            mode.sel(quantity="damping_ratio"),
        )
        residue = mode.sel(quantity="residue")
        rows.append(
            (
                str(name),
                _value(frequency),
                f"{number(100.0 * _of(frequency, 'temperature_slope'), 2)} %/K",
                percent(float(spread[at])),
                _value(damping),
                percent(_total(damping)),
                _residue(mode.sel(quantity="residue")),
                percent(_total(residue)),
                f"{_count(mode, 'responses_found')} / {_count(mode, 'responses_missing')}",
            )
        )
    columns = (
        ("mode", "text"),
        ("frequency, Hz", "number"),
        ("slope", "number"),
        ("spread", "number"),
        ("damping ratio", "number"),
        ("spread", "number"),
        ("residue", "number"),
        ("spread", "number"),
        ("found / missing", "number"),
    )
    at = population.attrs.get("reference_temperature", float("nan"))
    note = (
        f"Values at {number(float(at))} °C with standard errors; spreads are one sigma between "
        "plants at one temperature, variance of the fits taken out (restricted likelihood). "
        "± before a residue: heads see the mode with opposite signs."
    )
    return table_of("Modes of the population", columns, rows, note)


def _residue(data: xr.Dataset) -> str:
    """Return the mean residue, or ± its size where heads see the mode with opposite signs."""
    mean = _of(data, "population_value")
    heads = data["head_value"].values if "head_value" in data else np.array([mean])
    heads = heads[np.isfinite(heads)]
    if heads.size and heads.min() < 0.0 < heads.max() and abs(mean) < 0.5 * np.abs(heads).mean():
        return f"± {number(float(np.abs(heads).mean()))}"
    return number(mean)


def _of(data: xr.Dataset, name: str) -> float:
    return float(data[name].values) if name in data else float("nan")


def _value(data: xr.Dataset) -> str:
    value = _of(data, "population_value")
    return with_interval(value, _of(data, "population_value_standard_error"))


def _total(data: xr.Dataset) -> float:
    parts = np.array([_of(data, f"{source}_deviation") for source in ("unit", "head", "residual")])
    return float(np.sqrt(np.nansum(parts**2))) if np.isfinite(parts).any() else float("nan")


def _count(data: xr.Dataset, name: str) -> str:
    return str(int(data[name].values)) if name in data else "–"


def head_table(given: ReportInput) -> Table | None:
    """Return how far each head's mean frequency stands from the population, in percent."""
    population = given.population
    if population is None or "head_value" not in population:
        return None
    heads = population["head"].values.astype(str).tolist()
    if len(heads) < 2:
        return None
    frequency = population.sel(quantity="modal_frequency")
    relative = frequency["head_value"].transpose("mode", "head").values
    relative = 100.0 * (relative / frequency["population_value"].values[:, None] - 1.0)
    rows = [
        (str(name), *(_signed(value) for value in row))
        for name, row in zip(population["mode"].values, relative, strict=True)
    ]
    columns = [("mode", "text"), *((f"head {head}", "number") for head in heads)]
    return table_of("Mean frequency of each head, relative to the population", columns, rows)


def _signed(value: float) -> str:
    return f"{value:+.3f} %".replace("-", "−") if np.isfinite(value) else "–"


def fit_outcome_table(given: ReportInput) -> Table | None:
    """Return every fit that did not simply end well, with cause and advice."""
    if given.fits is None:
        return None
    names = short_names(given.fits)
    rows = []
    for name, code in zip(names, given.fits["fit_outcome"].values, strict=True):
        if int(code) != Outcome.DONE:
            advice = ADVICE[Outcome(int(code))]
            rows.append(
                (str(name), slug(int(code)), advice.happened, advice.cause, advice.try_next)
            )
    columns = (
        ("response", "text"),
        ("outcome", "text"),
        ("what happened", "text"),
        ("likely cause", "text"),
        ("what to try", "text"),
    )
    return table_of("Fits that need a look", columns, rows)


def mode_outcome_table(given: ReportInput) -> Table | None:
    """Return modes that are missing, shifted, extra or weak, counted by unit."""
    if given.modes is None or "mode_outcome" not in given.modes:
        return None
    units = units_of(given.modes)
    counts: dict[tuple[int, str, str], int] = {}
    for at, mode in enumerate(given.modes["mode"].values.astype(str)):
        in_population = bool(given.modes["mode_in_population"].values[at])
        for unit, code in zip(units, given.modes["mode_outcome"].values[:, at], strict=True):
            unused = not in_population and int(code) == Outcome.MODE_MISSING
            if int(code) != Outcome.DONE and not unused:
                key = (int(code), str(unit), str(mode))
                counts[key] = counts.get(key, 0) + 1
    rows = [
        (unit, mode, slug(code), str(counts[code, unit, mode]), ADVICE[Outcome(code)].try_next)
        for code, unit, mode in sorted(counts, key=lambda k: (k[0], natural_key(k[1]), k[2]))
    ]
    columns = (
        ("unit", "text"),
        ("mode", "text"),
        ("outcome", "text"),
        ("responses", "number"),
        ("what to try", "text"),
    )
    return table_of("Modes that need a look", columns, rows)
