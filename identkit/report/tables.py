"""Tables of the report: plain text cells, escaped only where they are shown."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.figures.labels import natural_key, nearest_mode, short_names, units_of
from identkit.figures.radius import readable_names
from identkit.figures.set_plants import labelled
from identkit.figures.style import frequency_label
from identkit.grids import datasets
from identkit.methods.arrays import FloatArray
from identkit.outcomes import ADVICE, Outcome, slug
from identkit.report.bound_curves import order_tradeoff
from identkit.report.contents import ReportInput
from identkit.report.numbers import listed, number, percent, with_interval
from identkit.report.verdict import excluded_names, frequency_spread, skipped_files

MOST_ROWS = 40


@dataclass(frozen=True)
class Table:
    """One table of a page.

    Attributes
    ----------
    title
        What it lists.
    columns
        Heads, each with "text" or "number" for its alignment.
    rows
        Cells as text.
    note
        Where the figures come from; "" where nothing needs saying.
    hidden
        Number of rows left out for want of room.
    """

    title: str
    columns: tuple[tuple[str, str], ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""
    hidden: int = 0


def _table(
    title: str,
    columns: Sequence[tuple[str, str]],
    rows: Sequence[Sequence[str]],
    note: str = "",
    most: int = MOST_ROWS,
) -> Table | None:
    if not rows:
        return None
    shown = tuple(tuple(row) for row in rows[:most])
    return Table(title, tuple(columns), shown, note, max(0, len(rows) - most))


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
                number(_of(residue, "population_value"), 3),
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
        "plants at one temperature, variance of the fits taken out (restricted likelihood)."
    )
    return _table("Modes of the population", columns, rows, note)


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
        (str(name), *(f"{number(value, 2)} %" if np.isfinite(value) else "–" for value in row))
        for name, row in zip(population["mode"].values, relative, strict=True)
    ]
    columns = [("mode", "text"), *((f"head {head}", "number") for head in heads)]
    return _table("Mean frequency of each head, relative to the population", columns, rows)


def marks_table(given: ReportInput) -> Table | None:
    """Return every response that screening marked, with value, limit and what became of it."""
    if given.screening is None:
        return None
    out, rows = excluded_names(given.plant_set), []
    for part in datasets(given.screening):
        names, ids = short_names(part), part["response"].values.astype(str)
        marked = part["response_mark"].values
        for at, kind in zip(*np.nonzero(marked), strict=True):
            value = float(part["response_mark_value"].values[at, kind])
            limit = float(part["response_mark_limit"].values[at, kind])
            fate = "left out" if ids[at] in out else "kept"
            mark = str(part["mark"].values[kind])
            rows.append((str(names[at]), mark, number(value), number(limit), fate))
    columns = (
        ("response", "text"),
        ("mark", "text"),
        ("value", "number"),
        ("limit", "number"),
        ("in the bound", "text"),
    )
    note = (
        "noise: median relative standard deviation; outlier: distance from peers in robust "
        "standard deviations; too-few-points: usable points."
    )
    return _table("Marked by screening", columns, rows, note)


def skipped_table(given: ReportInput) -> Table | None:
    """Return the files that were skipped, with the reason."""
    return _table("Files skipped", (("file", "text"), ("reason", "text")), skipped_files(given))


def excluded_table(given: ReportInput) -> Table | None:
    """Return the responses left out of the bound, one row per unit and reason."""
    owners: dict[str, str] = {}
    for part in datasets(given.responses):
        names = part["response"].values.astype(str).tolist()
        owners.update(zip(names, units_of(part).tolist(), strict=True))
    grouped: dict[tuple[str, str], list[str]] = {}
    for name, reason in excluded_names(given.plant_set).items():
        grouped.setdefault((owners.get(name, ""), reason), []).append(name)
    rows = [
        (unit, str(len(grouped[unit, reason])), reason, listed(grouped[unit, reason], 2))
        for unit, reason in sorted(grouped, key=lambda key: natural_key(key[0]))
    ]
    columns = (
        ("unit", "text"),
        ("responses", "number"),
        ("reason", "text"),
        ("which", "text"),
    )
    return _table("Left out of the bound", columns, rows)


def attribution_table(given: ReportInput) -> Table | None:
    """Return who attains the bound, where, and the share of the band each sets."""
    contents = given.plant_set
    if contents is None:
        return None
    names = readable_names(contents)
    total = max(len(contents.radii.set_by), 1)
    rows = [
        (
            names.get(entry.label, entry.label),
            number(entry.reach, 6),
            frequency_label(entry.frequency),
            entry.mode or "–",
            percent(contents.radii.set_by.count(entry.label) / total),
        )
        for entry in sorted(contents.attribution, key=lambda each: -each.reach)
    ]
    columns = (
        ("response", "text"),
        ("reach", "number"),
        ("at", "number"),
        ("mode", "text"),
        ("sets the radius at", "number"),
    )
    note = "Last column: share of the frequencies at which this response needs the largest radius."
    return _table("Who sets the bound", columns, rows, note, 20)


def worst_table(
    given: ReportInput, mode_names: Sequence[str], mode_frequency: FloatArray
) -> Table | None:
    """Return the plants with the largest reach."""
    if given.plant_set is None or not given.plant_set.plants:
        return None
    data = labelled(given.plant_set.plants)
    names, reach = short_names(data), data["reach"].values
    frequency = data["reach_frequency"].values
    rows = [
        (
            str(names[at]),
            number(float(reach[at]), 6),
            frequency_label(float(frequency[at])),
            nearest_mode(float(frequency[at]), list(mode_names), mode_frequency) or "–",
        )
        for at in np.argsort(-reach, kind="stable")[:20]
    ]
    columns = (("response", "text"), ("reach", "number"), ("at", "number"), ("mode", "text"))
    return _table("Largest reach", columns, rows, "Computed from the set file alone.")


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
    return _table("Fits that need a look", columns, rows)


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
    return _table("Modes that need a look", columns, rows)


def order_table(given: ReportInput) -> Table | None:
    """Return every order of the weight that was tried, with its proved floor."""
    if given.plant_set is None:
        return None
    chosen = given.plant_set.certificate.optimality.order
    tried = order_tradeoff(given.bound, chosen)
    if tried is None:
        return None
    rows = [
        (
            str(int(order)),
            f"{excess:.3f}",
            f"{floor:.3f}",
            f"{max(excess - floor, 0.0):.3f}",
            "chosen" if order == chosen else "",
        )
        for order, excess, floor in zip(tried.order, tried.excess, tried.floor, strict=True)
    ]
    columns = (
        ("order", "number"),
        ("excess, dB", "number"),
        ("proved floor, dB", "number"),
        ("gap, dB", "number"),
        ("", "text"),
    )
    return _table("Orders of the weight", columns, rows)


def audit_table(given: ReportInput) -> Table | None:
    """Return every response that the audit does not call held."""
    return None
