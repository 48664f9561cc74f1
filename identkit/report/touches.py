"""Where plants touch the weight, unit by unit."""

from collections import defaultdict
from dataclasses import dataclass

from identkit.figures.labels import condition_of, natural_key, spoken_unit, units_of
from identkit.figures.set_plants import labelled
from identkit.figures.style import frequency_label
from identkit.plant_set.fields import Attribution, PlantSetFields
from identkit.report.contents import ReportInput
from identkit.report.mode_findings import mode_near

NEAR = 0.995
"""Share of the largest reach from which a plant counts as touching the weight."""


@dataclass(frozen=True)
class Touches:
    """Places where the plants of one unit touch the weight.

    Attributes
    ----------
    unit
        The unit, or the response where no unit is named.
    places
        'head 1, 50 °C near 4.51 kHz, M3' for every place, by frequency.
    """

    unit: str
    places: tuple[str, ...]


def touching(given: ReportInput) -> list[Touches]:
    """Return the units whose plants touch the weight, those that do so most often first."""
    contents = given.plant_set
    if contents is None or not contents.attribution:
        return []
    names = _names(contents)
    largest = max(entry.reach for entry in contents.attribution)
    places: dict[str, list[str]] = defaultdict(list)
    for entry in sorted(contents.attribution, key=lambda each: each.frequency):
        if entry.reach >= NEAR * largest:
            unit, condition = names.get(entry.label, (entry.label, ""))
            places[unit].append(_place(given, entry, condition))
    ordered = sorted(places, key=lambda unit: (-len(places[unit]), natural_key(unit)))
    return [Touches(spoken_unit(unit), tuple(places[unit])) for unit in ordered]


def _names(contents: PlantSetFields) -> dict[str, tuple[str, str]]:
    """Return unit and condition of every plant by its response id."""
    if not contents.plants:
        return {}
    data = labelled(contents.plants)
    both = zip(units_of(data).tolist(), condition_of(data).tolist(), strict=True)
    return dict(zip(data["response"].values.tolist(), both, strict=True))


def _place(given: ReportInput, entry: Attribution, condition: str) -> str:
    mode = mode_near(given, entry.frequency, entry.mode)
    place = f"{condition} near {frequency_label(entry.frequency)}".strip()
    return f"{place}, {mode}" if mode else place
