"""The report: one self-contained page, verdict first."""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined, select_autoescape

from identkit.atomic import write_text
from identkit.figures.style import frequency_label
from identkit.grids import datasets
from identkit.report import (
    coverage_tables,
    measurement_tables,
    mode_tables,
    price_findings,
    record_tables,
    set_tables,
)
from identkit.report.contents import ReportInput
from identkit.report.gallery import Exhibit, hang, population_modes
from identkit.report.numbers import counted, number
from identkit.report.table import Table
from identkit.report.touches import touching
from identkit.report.verdict import headline, verdict

__all__ = ["ReportInput", "build_report", "write_report"]

CAUTIONS = (
    "Excitation tests and changes to a controller can damage hardware and hurt people. Keep "
    "people clear, limit force, travel and current, and have an emergency stop in reach.",
    "A coverage figure is a statement about sampled units under stated assumptions. It is no "
    "safety certificate.",
    "The set says what was measured and fitted inside its band and conditions. Outside them "
    "nothing is known from this report.",
    "Local codes, standards and the judgement of licensed practitioners prevail over anything "
    "written here.",
)


@dataclass(frozen=True)
class Tile:
    """One key figure: a short name, its value, a few words."""

    name: str
    value: str
    words: str


def write_report(given: ReportInput, results_folder: Path) -> Path:
    """Write ``figures/`` and ``report.html`` into a results folder.

    Parameters
    ----------
    given
        What the stages wrote.
    results_folder
        Receives the pictures, then the page; each file is replaced whole or not at all.

    Returns
    -------
    Path
        Of the page.
    """
    return build_report(results_folder, given)


def build_report(folder: Path, context: ReportInput) -> Path:
    """Write the report of `context` into `folder`; see `write_report`."""
    exhibits = hang(context, folder / "figures")
    page = folder / "report.html"
    write_text(page, render(context, exhibits))
    return page


def render(given: ReportInput, exhibits: Mapping[str, Exhibit]) -> str:
    """Return the page as HTML that needs nothing from outside.

    Parameters
    ----------
    given
        What the stages wrote.
    exhibits
        Pictures by name; one that is missing leaves no gap.
    """
    environment = Environment(
        loader=PackageLoader("identkit", "report"),
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    style = environment.loader.get_source(environment, "page.css")[0]  # type: ignore[union-attr]
    return environment.get_template("page.html").render(
        style=style,
        study=given.study_name,
        subtitle=_subtitle(given),
        headline=headline(given),
        tiles=_tiles(given),
        sentences=list(given.verdict) or verdict(given),
        exhibits=exhibits,
        tables=_all_tables(given),
        audit_counts=set_tables.audit_counts(given),
        failed_checks=set_tables.failed_checks(given),
        provenance=_provenance(given),
        cautions=CAUTIONS,
    )


def _subtitle(given: ReportInput) -> str:
    first = datasets(given.responses)[0]
    sides = []
    for side in ("input", "output"):
        unit = str(first.attrs.get(f"{side}_unit", ""))
        names = ", ".join(map(str, first[side].values))
        sides.append(f"{names} ({unit})" if unit else names)
    parts = [" to ".join(sides)]
    if given.plant_set is not None:
        low, high = given.plant_set.band
        parts.append(f"{given.plant_set.form} set")
        parts.append(f"{frequency_label(low)} to {frequency_label(high)}")
        if given.plant_set.provenance.time:
            parts.append(given.plant_set.provenance.time[:10])
    return " · ".join(parts)


def _tiles(given: ReportInput) -> list[Tile]:
    tiles = []
    names, frequency = population_modes(given)
    contents = given.plant_set
    if contents is not None:
        measured, best = contents.certificate.measured, contents.certificate.optimality
        out = len(measured.excluded)
        words = f"responses; {out} left out" if out else "responses used"
        tiles.append(Tile("Held", f"{measured.held} of {measured.of}", words))
        words = f"{number(max(best.gap_db, 0.0), 2)} dB from the best possible"
        tiles.append(Tile("Weight", f"order {best.order}", words))
    if names:
        span = f"{frequency_label(frequency.min())} to {frequency_label(frequency.max())}"
        tiles.append(Tile("Modes", str(len(names)), span))
    touches = touching(given)
    if touches:
        everywhere = sum(len(touch.places) for touch in touches)
        words = f"at {len(touches[0].places)} of {counted(everywhere, 'frequency', 'frequencies')}"
        tiles.append(Tile("Set most by", touches[0].unit, words))
    return tiles


def _all_tables(given: ReportInput) -> dict[str, Table]:
    names, frequency = population_modes(given)
    found = {
        "claims": set_tables.claims_table(given),
        "coverage": coverage_tables.coverage_table(given),
        "unit_costs": coverage_tables.unit_cost_table(given),
        "coverage_checks": coverage_tables.coverage_checks_table(given),
        "attribution": set_tables.attribution_table(given),
        "price": price_findings.price_table(given),
        "worst": set_tables.worst_table(given, names, frequency),
        "population": mode_tables.population_table(given),
        "heads": mode_tables.head_table(given),
        "mode_outcomes": mode_tables.mode_outcome_table(given),
        "fit_outcomes": mode_tables.fit_outcome_table(given),
        "marks": measurement_tables.marks_table(given),
        "skipped": measurement_tables.skipped_table(given),
        "excluded": measurement_tables.excluded_table(given),
        "estimates": record_tables.estimates_table(given),
        "record_marks": record_tables.record_marks_table(given),
        "second_opinion": record_tables.second_opinion_table(given),
        "orders": set_tables.order_table(given),
        "audit": set_tables.audit_table(given),
    }
    return {name: table for name, table in found.items() if table is not None}


def _provenance(given: ReportInput) -> dict[str, Any]:
    recorded = given.plant_set.provenance if given.plant_set is not None else None
    run = given.run
    versions = dict(recorded.versions) if recorded is not None else {}
    versions |= {"python": run.get("python", ""), **run.get("libraries", {})}
    versions |= {"identkit": run["version"]} if "version" in run else {}
    stages = {
        name: f"{float(entry.get('seconds', 0.0)):.2f} s"
        for name, entry in run.get("stages", {}).items()
    }
    inputs = {name: entry.get("sha256", "") for name, entry in run.get("inputs", {}).items()}
    settings = recorded.settings if recorded is not None else {}
    return {
        "versions": {name: str(value) for name, value in versions.items() if value},
        "stages": stages,
        "inputs": inputs or (dict(recorded.input_digests) if recorded is not None else {}),
        "settings": json.dumps(settings, indent=1, default=str) if settings else "",
    }
