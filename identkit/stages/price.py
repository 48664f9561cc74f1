"""What the set would cost without each unit, head, temperature, lot, or without one mode's spread.

A weight refitted to the plants that remain cannot lie below the radius they require at any
frequency, around the same nominal. The price without is therefore stated as a bound: no set of this
form around this nominal allows the standard loop a higher crossover.
"""

from collections.abc import Iterator, Sequence

import numpy as np
import xarray as xr

from identkit.errors import InputError
from identkit.methods.allowed_bandwidth import bandwidth_of_curve
from identkit.methods.arrays import ComplexArray, FloatArray, IntArray
from identkit.plant_set.fields import FittedPlant, PlantSetFields
from identkit.plant_set.pointwise import relative_error
from identkit.plant_set.response import TWO_PI, nominal_response
from identkit.plant_set.stacked import plants_at
from identkit.set_price import CONDITIONS, refuse_price, unremovable_of
from identkit.set_resonances import resonances

LABELS = ("unit", "head", "temperature", "lot")
EVERYTHING = "everything in"
SPREAD = "mode's spread"
SAME_MODE = 0.12
METHOD = (
    "pointwise required radius of the plants that remain around the same nominal; weights are not "
    "fitted again, so the crossover is an upper bound"
)


def attribute_price(contents: PlantSetFields) -> xr.Dataset:
    """Return the price without every unit, head, temperature and lot, and without modes' spread.

    Parameters
    ----------
    contents
        The set with all its plants; those it left out do not count.

    Returns
    -------
    Dataset
        Along ``part``: ``part_kind`` ("everything in", a label, or "mode's spread"),
        ``part_value``, ``part_plants`` (how many plants remain), ``allowed_crossover`` and
        ``limited_at`` (Hz), ``peak_radius_db`` and ``mean_radius_db`` (over log frequency). The
        first part is everything in. Without a mode's spread means that the frequency, damping
        ratio and residue of the mode are those of its median in every plant. Empty, with
        the attribute ``not_priced``, where the yardstick does not cover the set.
    """
    try:
        refuse_price(contents)
        carried = unremovable_of(contents)
    except InputError as error:
        return xr.Dataset(attrs={"not_priced": str(error)})
    out = {each.label for each in contents.certificate.measured.excluded}
    plants = [plant for plant in contents.plants if plant.response not in out]
    if not plants:
        return xr.Dataset(attrs={"not_priced": "the file lists no plants"})
    frequency = contents.radii.frequency
    nominal = nominal_response(contents, frequency)[0, 0]
    errors = _errors(contents.form, plants_at(plants, frequency)[:, :, 0, 0], nominal)
    scale = np.abs(nominal) if contents.form == "additive" else np.ones(frequency.size)
    rows = []
    for kind, value, count, radius in _parts(contents, plants, nominal, errors):
        required = np.maximum(radius, contents.radii.floor * scale)
        found = bandwidth_of_curve(frequency, required / scale, carried, CONDITIONS[contents.form])
        level = 20.0 * np.log10(required)
        mean = np.trapezoid(level, np.log(frequency)) / np.log(frequency[-1] / frequency[0])
        rows.append((kind, value, count, found.crossover, found.limited_at, level.max(), mean))
    return _table(rows)


def _errors(form: str, plants: ComplexArray, nominal: ComplexArray) -> FloatArray:
    return np.asarray(np.abs(relative_error(form, plants, nominal)), dtype=float)


def _parts(
    contents: PlantSetFields,
    plants: Sequence[FittedPlant],
    nominal: ComplexArray,
    errors: FloatArray,
) -> Iterator[tuple[str, str, int, FloatArray]]:
    """Yield kind, value, number of plants and required radius of everything and of each part."""
    yield EVERYTHING, "", len(plants), errors.max(axis=0)
    for label in LABELS:
        values = np.array([_text(plant.labels.get(label)) for plant in plants])
        different = sorted(set(values.tolist()) - {""})
        for value in different if len(different) > 1 else []:
            kept = values != value
            yield label, value, int(kept.sum()), errors[kept].max(axis=0)
    yield from _still_modes(contents, plants, nominal)


def _text(value: str | float | None) -> str:
    if value is None:
        return ""
    return value if isinstance(value, str) else f"{value:g}"


def _still_modes(
    contents: PlantSetFields, plants: Sequence[FittedPlant], nominal: ComplexArray
) -> Iterator[tuple[str, str, int, FloatArray]]:
    """Yield the radius with each mode at its median in every plant."""
    frequency = contents.radii.frequency
    known = resonances(contents)
    whole = plants_at(plants, frequency)[:, :, 0, 0]
    s = np.asarray(1j * TWO_PI * frequency, dtype=complex)
    late = np.exp(-s * np.array([plant.delay for plant in plants])[:, None])
    for name, hertz in zip(known.names, known.frequency, strict=True):
        place = np.array([_nearest(plant, float(hertz)) for plant in plants])
        has = place >= 0
        if not has.any():
            continue
        own = _mode_table(plants, place)
        median = np.nanmedian(own[has], axis=0)
        change = _term(s, np.where(has[:, None], median, own)) - _term(s, own)
        change[~has] = 0.0
        still = whole + change * late
        radius = _errors(contents.form, still, nominal).max(axis=0)
        yield SPREAD, name or f"{hertz:.5g} Hz", len(plants), radius


def _nearest(plant: FittedPlant, hertz: float) -> int:
    """Return which mode of a plant lies nearest, within 12 %; -1 for none."""
    if not plant.modal_frequency.size:
        return -1
    apart = np.abs(np.log(plant.modal_frequency / hertz))
    k = int(apart.argmin())
    return k if apart[k] < SAME_MODE else -1


def _mode_table(plants: Sequence[FittedPlant], place: IntArray) -> FloatArray:
    """Return (plants, 4): rad/s, damping ratio, residue and its rate; ones and zeros for none."""
    table = np.tile(np.array([1.0, 1.0, 0.0, 0.0]), (len(plants), 1))
    for row, (plant, k) in enumerate(zip(plants, place.tolist(), strict=True)):
        if k >= 0:
            table[row] = (
                TWO_PI * plant.modal_frequency[k],
                plant.damping_ratio[k],
                plant.residue[k, 0, 0],
                plant.residue_rate[k, 0, 0],
            )
    return table


def _term(s: ComplexArray, table: FloatArray) -> ComplexArray:
    natural, ratio, residue, rate = (table[:, k, None] for k in range(4))
    return np.asarray((residue + s * rate) / (natural**2 + 2.0 * ratio * natural * s + s * s))


def _table(rows: Sequence[tuple[str, str, int, float, float, float, float]]) -> xr.Dataset:
    kind, value, count, crossover, at, peak, mean = (
        list(column) for column in zip(*rows, strict=True)
    )
    columns = {
        "part_kind": np.array(kind),
        "part_value": np.array(value),
        "part_plants": np.array(count),
        "allowed_crossover": np.array(crossover, dtype=float),
        "limited_at": np.array(at, dtype=float),
        "peak_radius_db": np.array(peak, dtype=float),
        "mean_radius_db": np.array(mean, dtype=float),
    }
    return xr.Dataset(
        {name: ("part", column) for name, column in columns.items()}, attrs={"method": METHOD}
    )
