"""What the set costs in bandwidth, in a sentence and as a table."""

import numpy as np
import xarray as xr

from identkit.errors import InputError
from identkit.figures.style import frequency_label
from identkit.report.contents import ReportInput
from identkit.report.mode_findings import mode_near
from identkit.report.table import Table, table_of
from identkit.set_price import bandwidth_of_set
from identkit.stages.price import EVERYTHING, SPREAD

GAIN = 1.01
"""A part counts as costing bandwidth from one per cent on."""
PARTS_NAMED = 3
MOST_ROWS = 16


def yardstick_sentence(given: ReportInput) -> str:
    """Say how high a crossover the set allows the standard loop, what stops it, and who."""
    if given.plant_set is None:
        return ""
    try:
        found = bandwidth_of_set(given.plant_set)
    except InputError:
        return ""
    if not np.isfinite(found.crossover):
        return ""
    reaches = f"can reach {frequency_label(found.crossover)} crossover with this set"
    if not found.crossover > 0.0:
        reaches = "cannot be robustly stable with this set at any crossover"
    place = ""
    if np.isfinite(found.limited_at) and found.crossover > 0.0:
        mode = mode_near(given, found.limited_at, "")
        place = f"; the weight stops it at {frequency_label(found.limited_at)}"
        place += f", {mode}" if mode else ""
    return (
        f"A standard second-order loop (damping ratio 0.71, with the nominal's delay and right "
        f"half-plane zeros) {reaches}{place}.{_who(given.price)}"
    )


def _who(price: xr.Dataset | None) -> str:
    """Say what a tighter weight, or the set without one part, could allow at most."""
    if price is None or "part_kind" not in price:
        return ""
    crossover = price["allowed_crossover"].values
    kinds, values = price["part_kind"].values, price["part_value"].values
    best = float(crossover[0])
    text = f" No weight around this nominal can allow more than {frequency_label(best)}"
    order = [k for k in np.argsort(-crossover, kind="stable") if crossover[k] > GAIN * best]
    named = [f"{_part(kinds[k], values[k])} {frequency_label(crossover[k])}" for k in order]
    if not named:
        return f"{text}, whichever one part of the campaign is left out."
    return f"{text}; without {', '.join(named[:PARTS_NAMED])} at most."


def _part(kind: str, value: str) -> str:
    return f"the spread of {value}" if kind == SPREAD else f"{kind} {value}"


def price_table(given: ReportInput) -> Table | None:
    """Return the price with everything in, and without the parts that cost most."""
    price = given.price
    if price is None or "part_kind" not in price:
        return None
    crossover, mean = price["allowed_crossover"].values, price["mean_radius_db"].values
    order = np.lexsort((mean[1:], -np.round(crossover[1:], 6))) + 1
    rows = [_row(price.isel(part=k), float(crossover[0])) for k in (0, *order.tolist())]
    columns = (
        ("without", "text"),
        ("plants left", "number"),
        ("crossover at most", "number"),
        ("change", "number"),
        ("largest radius", "number"),
        ("mean radius", "number"),
    )
    note = f"Basis: {price.attrs.get('method', '')}. Mean over log frequency."
    return table_of("What the set costs, and without whom", columns, rows, note, MOST_ROWS)


def _row(part: xr.Dataset, whole: float) -> tuple[str, ...]:
    kind, value = str(part["part_kind"].values), str(part["part_value"].values)
    crossover = float(part["allowed_crossover"])
    change = f"{100.0 * (crossover / whole - 1.0):+.1f} %" if 0.0 < whole < np.inf else "–"
    return (
        "nothing: everything in" if kind == EVERYTHING else _part(kind, value),
        str(int(part["part_plants"])),
        frequency_label(crossover) if np.isfinite(crossover) else "not limited",
        "" if kind == EVERYTHING else change,
        f"{float(part['peak_radius_db']):.2f} dB",
        f"{float(part['mean_radius_db']):.2f} dB",
    )
