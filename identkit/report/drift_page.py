"""The drift page for a quality group: one self-contained page, verdict first, and its CSV files."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from jinja2 import Environment, PackageLoader, StrictUndefined, select_autoescape
from matplotlib.figure import Figure

from identkit.atomic import write_text
from identkit.figures.drift_overview import draw_drift_overview, pick_drift_overview
from identkit.figures.drift_reach import draw_drift_reach, pick_drift_reach
from identkit.figures.drift_series import draw_drift_series, pick_drift_series
from identkit.figures.style import NARROW, WIDE
from identkit.report.captions import Caption
from identkit.report.drift_contents import DriftInput, drift_sentences, drift_state, series_words
from identkit.report.drift_tables import (
    left_out_table,
    moved_table,
    points_frame,
    pull_table,
    series_table,
    signals_frame,
)
from identkit.report.numbers import number
from identkit.report.page import CAUTIONS, Tile
from identkit.report.pictures import InlinePicture, picture
from identkit.stages.tables import write_table

MOST_CHARTS = 12
_CLASSES = {"signal": "not-held", "no signal": "held", "baseline": "no-set"}


@dataclass(frozen=True)
class _Shown:
    """One picture with its caption."""

    picture: InlinePicture
    caption: Caption


def write_drift_report(given: DriftInput, folder: Path) -> Path:
    """Write ``drift.html``, its pictures, ``drift.csv`` and ``drift_signals.csv``.

    Parameters
    ----------
    given
        What the charts say.
    folder
        Made if it does not exist; every file is replaced whole or not at all.

    Returns
    -------
    Path
        Of the page.
    """
    pictures = folder / "figures"
    pictures.mkdir(parents=True, exist_ok=True)
    for old in pictures.glob("drift-*"):
        old.unlink()
    shown = list(_exhibits(given, pictures))
    write_table(points_frame(given), folder / "drift.csv")
    write_table(signals_frame(given), folder / "drift_signals.csv")
    page = folder / "drift.html"
    write_text(page, render(given, shown))
    return page


def render(given: DriftInput, exhibits: list[_Shown]) -> str:
    """Return the page as HTML that needs nothing from outside."""
    environment = Environment(
        loader=PackageLoader("identkit", "report"),
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    style = environment.loader.get_source(environment, "page.css")[0]  # type: ignore[union-attr]
    state, sentence = drift_state(given)
    tables = {
        "pull": pull_table(given),
        "moved": moved_table(given),
        "series": series_table(given),
        "left_out": left_out_table(given),
    }
    return environment.get_template("drift.html").render(
        style=style,
        history=given.history,
        state=state,
        state_class=_CLASSES[state],
        sentence=sentence,
        tiles=_tiles(given),
        sentences=drift_sentences(given),
        exhibits=exhibits,
        tables=tables,
        cautions=CAUTIONS,
    )


def _tiles(given: DriftInput) -> list[Tile]:
    points = given.points
    units = len(np.unique(points["unit"].values))
    again = int(np.sum(points["visit_number"].values > 1))
    tiles = [Tile("Units", str(units), f"{again} visits of units measured again")]
    watched = 0 if given.charted is None else int(given.charted["watched"].values.any(axis=1).sum())
    tiles.append(Tile("Watched", str(watched), "units after the baseline"))
    tiles.append(Tile("Series that moved", str(len(given.signals)), "of those charted"))
    reach = points["largest_reach"].values
    if np.isfinite(reach).any():
        tiles.append(Tile("Largest reach", number(float(np.nanmax(reach)), 3), "1 is the set"))
    return tiles


def _exhibits(given: DriftInput, folder: Path) -> Iterator[_Shown]:
    if given.charted is not None:
        for place, one in enumerate(given.signals[:MOST_CHARTS]):
            index = int(np.flatnonzero(given.charted["series"].values == one.series)[0])
            picked = pick_drift_series(given.charted, index, one.candidates, one.until)
            yield _hang(f"drift-{place + 1}", picked, draw_drift_series, folder, _moved(one.series))
        overview = pick_drift_overview(given.charted)
        if overview is not None:
            yield _hang("drift-overview", overview, draw_drift_overview, folder, _OVERVIEW)
    reach = pick_drift_reach(given.points, given.exit)
    if reach is not None:
        yield _hang("drift-reach", reach, draw_drift_reach, folder, _REACH)


def _hang(name: str, picked: Any, draw: Any, folder: Path, caption: Caption) -> _Shown:
    wide: Figure = draw(picked, WIDE)
    narrow: Figure = draw(picked, NARROW)
    words = f"{caption.title}. {caption.look}"
    return _Shown(picture(name, wide, narrow, folder, words), caption)


def _moved(series: str) -> Caption:
    return Caption(
        f"{series_words(series)}, unit by unit",
        "Where the points leave the level of the shaded baseline, and which line below crosses 1 "
        "first: a single unit, the mean of a lot, or a slow movement of many.",
        "One point per unit: heads and temperatures averaged, brought to the reference temperature "
        "with the population's slope; bars show one standard deviation of the known error of "
        "measurement. Red lines are the limits of a single unit, from the run length of all charts "
        "together. After the change units are judged by those before it.",
    )


_OVERVIEW = Caption(
    "Every series, unit by unit",
    "Dark cells are charts near their limit, orange ones beyond it. A column that is dark "
    "throughout is a unit that stands apart; a row that stays dark is a mode that moved.",
    "Largest share of its limit among single unit, lot mean, moving average and cumulative sum; "
    "the last row is the multivariate moving average of all modal frequencies. White: baseline, "
    "or not measured.",
)
_REACH = Caption(
    "Reach of every unit in the released set",
    "Points above the line are units the set does not hold. Open points are units from which the "
    "set was made: they cannot lie above it and say nothing of what comes. A broken line is an "
    "extrapolation and holds only while the trend does.",
    "Largest reach over heads and temperatures, from the released set and the fitted plants. The "
    "trend is a straight line through the logarithm; its crossing has Fieller's interval.",
)
