"""The pictures of a report, each with what to look for and on what it rests."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.figure import Figure

from identkit.figures.fit_quality import draw_fit_quality, pick_fit_quality
from identkit.figures.mode_map import draw_mode_map, pick_mode_map
from identkit.figures.order_tradeoff import draw_order_tradeoff
from identkit.figures.radius import draw_radius, pick_radius
from identkit.figures.reach_strip import draw_reach_strip, pick_reach_strip
from identkit.figures.responses_fan import draw_responses_fan, pick_responses_fan
from identkit.figures.screening import draw_screening, pick_screening
from identkit.figures.style import NARROW, WIDE, Layout
from identkit.figures.worst import draw_worst, pick_worst
from identkit.grids import datasets
from identkit.methods.arrays import FloatArray
from identkit.plant_set.fields import PlantSetFields
from identkit.plant_set.response import nominal_response
from identkit.report.bound_curves import order_tradeoff, pointwise_floor
from identkit.report.captions import CAPTIONS, Caption
from identkit.report.contents import ReportInput
from identkit.report.form_words import radius_is_relative
from identkit.report.pictures import InlinePicture, picture
from identkit.report.verdict import excluded_names


@dataclass(frozen=True)
class Exhibit:
    """One picture with its caption."""

    picture: InlinePicture
    caption: Caption


def hang(given: ReportInput, folder: Path) -> dict[str, Exhibit]:
    """Draw every picture the data allow, write its files into `folder`, and return them by name."""
    folder.mkdir(parents=True, exist_ok=True)
    exhibits = {}
    for name, pick, draw in _TOPICS:
        picked = pick(given)
        if picked is None:
            (folder / f"{name}.svg").unlink(missing_ok=True)
            (folder / f"{name}.png").unlink(missing_ok=True)
            continue
        caption = CAPTIONS[name]
        words = f"{caption.title}. {caption.look}"
        shown = picture(name, draw(picked, WIDE), draw(picked, NARROW), folder, words)
        exhibits[name] = Exhibit(shown, caption)
    return exhibits


def population_modes(given: ReportInput) -> tuple[tuple[str, ...], FloatArray]:
    """Return names and frequencies (Hz) of the population's modes; none where not described."""
    if given.population is None:
        return (), np.zeros(0)
    value = given.population["population_value"].sel(quantity="modal_frequency").values
    return tuple(str(name) for name in given.population["mode"].values), value


def _modes(given: ReportInput) -> dict[str, Any]:
    names, frequency = population_modes(given)
    return {"mode_names": names, "mode_frequency": frequency}


def _fan(given: ReportInput) -> Any:
    if given.plant_set is None:
        return pick_responses_fan(given.responses)
    frequency, nominal = _nominal(given, given.plant_set)
    out = excluded_names(given.plant_set)
    used = [plant for plant in given.plant_set.plants if plant.response not in out]
    worst = max(used, key=lambda plant: plant.reach, default=None)
    return pick_responses_fan(
        given.responses,
        nominal_frequency=frequency,
        nominal_response=nominal,
        highlight=worst.response if worst is not None else "",
    )


def _nominal(given: ReportInput, contents: PlantSetFields) -> tuple[FloatArray, Any]:
    grids = [part["frequency"].values for part in datasets(given.responses)]
    frequency = np.unique(np.concatenate(grids))
    frequency = frequency[frequency > 0.0]
    return frequency, nominal_response(contents, frequency)[0, 0]


def _screening(given: ReportInput) -> Any:
    return None if given.screening is None else pick_screening(given.screening, given.responses)


def _fits(given: ReportInput) -> Any:
    fits = given.modes if given.modes is not None else given.fits
    return None if fits is None else pick_fit_quality(fits, given.responses)


def _mode_map(given: ReportInput) -> Any:
    if given.modes is None or given.population is None or not given.population.sizes["mode"]:
        return None
    return pick_mode_map(given.modes, given.population)


def _radius(given: ReportInput) -> Any:
    contents = given.plant_set
    if contents is None or not contents.is_scalar or not contents.radii.frequency.size:
        return None
    floor = pointwise_floor(given.nominal) if radius_is_relative(contents) else None
    curves: dict[str, Any] = (
        {} if floor is None else {"floor_frequency": floor.frequency, "floor": floor.radius}
    )
    return pick_radius(contents, **curves, **_modes(given))


def _strip(given: ReportInput) -> Any:
    return None if given.plant_set is None else pick_reach_strip(given.plant_set, **_modes(given))


def _worst(given: ReportInput) -> Any:
    return pick_worst(given.plant_set, audit=given.audit, **_modes(given))


def _orders(given: ReportInput) -> Any:
    if given.plant_set is None:
        return None
    return order_tradeoff(given.bound, given.plant_set.certificate.optimality.order)


_TOPICS: tuple[tuple[str, Callable[[ReportInput], Any], Callable[[Any, Layout], Figure]], ...] = (
    ("radius", _radius, draw_radius),
    ("reach", _strip, draw_reach_strip),
    ("worst", _worst, draw_worst),
    ("orders", _orders, draw_order_tradeoff),
    ("modes", _mode_map, draw_mode_map),
    ("fits", _fits, draw_fit_quality),
    ("responses", _fan, draw_responses_fan),
    ("screening", _screening, draw_screening),
)
