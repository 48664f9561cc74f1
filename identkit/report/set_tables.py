"""Tables of the set: who sets it, the orders tried, the audit."""

import json
from collections import Counter
from collections.abc import Sequence

import numpy as np
import xarray as xr

from identkit.figures.labels import nearest_mode, short_names
from identkit.figures.radius import readable_names
from identkit.figures.set_plants import labelled, left_out
from identkit.figures.style import frequency_label
from identkit.methods.arrays import FloatArray
from identkit.report.bound_curves import order_tradeoff
from identkit.report.contents import ReportInput
from identkit.report.mode_findings import mode_near
from identkit.report.numbers import counted, listed, number, percent
from identkit.report.table import Table, table_of

HALF_WAY = 0.5
"""Attributions below this reach are left to the set file."""


def claims_table(given: ReportInput) -> Table | None:
    """Return what the certificate claims, each with its method."""
    if given.plant_set is None:
        return None
    certificate = given.plant_set.certificate
    between, best = certificate.between_grid, certificate.optimality
    audit = certificate.audit
    judged = "not audited" if audit is None else "passed" if audit.passed else "failed"
    rule = str(given.bound.attrs.get("order_rule", "")) if given.bound is not None else ""
    rows = [
        ("held", f"{certificate.measured.held} of {certificate.measured.of}", "reach at most 1"),
        ("between measured frequencies", number(between.worst, 8), between.method),
        ("tolerance there", number(between.tolerance, 2), "stated by that method"),
        ("order of the weight", str(best.order), rule),
        ("excess", f"{best.excess_db:.4f} dB", "weight over required radius times profile"),
        ("proved floor", f"{best.floor_db:.4f} dB", "no weight of this order does better"),
        ("audit", judged, "from the set file alone"),
    ]
    columns = (("claim", "text"), ("value", "number"), ("basis", "text"))
    return table_of("What the certificate claims", columns, rows)


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
            mode_near(given, entry.frequency, entry.mode) or "–",
            percent(contents.radii.set_by.count(entry.label) / total),
        )
        for entry in sorted(contents.attribution, key=lambda each: -each.reach)
        if entry.reach >= HALF_WAY
    ]
    columns = (
        ("response", "text"),
        ("reach", "number"),
        ("at", "number"),
        ("mode", "text"),
        ("sets the radius at", "number"),
    )
    note = "Last column: share of the frequencies at which this response needs the largest radius."
    return table_of("Who sets the bound", columns, rows, note, 16)


def worst_table(
    given: ReportInput, mode_names: Sequence[str], mode_frequency: FloatArray
) -> Table | None:
    """Return the plants with the largest reach."""
    if given.plant_set is None or not given.plant_set.plants:
        return None
    data = labelled(given.plant_set.plants)
    names, reach, out = short_names(data), data["reach"].values, left_out(given.plant_set)
    frequency = data["reach_frequency"].values
    rows = [
        (
            str(names[at]),
            number(float(reach[at]), 6),
            frequency_label(float(frequency[at])),
            nearest_mode(float(frequency[at]), list(mode_names), mode_frequency) or "–",
        )
        for at in np.lexsort((-reach, out))[:10]
        if not out[at]
    ]
    columns = (
        ("response", "text"),
        ("reach", "number"),
        ("at", "number"),
        ("mode", "text"),
    )
    note = "Plants that count for the bound; those left out stand in the audit table."
    return table_of("Largest reach", columns, rows, note)


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
    return table_of("Orders of the weight", columns, rows)


def audit_table(given: ReportInput) -> Table | None:
    """Return every response that the audit does not call held, those not left out first."""
    audit = given.audit
    if audit is None:
        return None
    verdicts, excluded = audit["verdict"].values.astype(str), audit["excluded"].values
    chosen = [at for at in range(verdicts.size) if verdicts[at] != "held"]
    chosen.sort(key=lambda at: (bool(excluded[at]), verdicts[at]))
    names = short_names(audit)
    rows = [
        (
            str(names[at]),
            str(verdicts[at]),
            _at(audit, at, "fit_reach", "fit_reach_frequency"),
            str(audit["nearest_mode"].values[at]) or "–",
            _at(audit, at, "raw_reach", "raw_reach_frequency"),
            _at(audit, at, "raw_reach_with_allowance", "raw_reach_with_allowance_frequency"),
            "left out" if excluded[at] else "used",
        )
        for at in chosen
    ]
    columns = (
        ("response", "text"),
        ("verdict", "text"),
        ("reach of fit", "number"),
        ("mode", "text"),
        ("raw points", "number"),
        ("noise allowed for", "number"),
        ("in the bound", "text"),
    )
    note = (
        "Raw points are judged with an allowance for their noise; cannot tell lies between "
        "with and without it. The verdict rests on fitted plants, and on raw points only where "
        "they are clearly not held."
    )
    return table_of("Responses that the audit does not call held", columns, rows, note)


def _at(audit: xr.Dataset, at: int, value: str, frequency: str) -> str:
    reach, hertz = float(audit[value].values[at]), float(audit[frequency].values[at])
    if not np.isfinite(reach):
        return number(reach)
    return (
        f"{number(reach, 4)} at {frequency_label(hertz)}" if np.isfinite(hertz) else number(reach)
    )


def audit_counts(given: ReportInput) -> str:
    """Return how many responses the audit calls held, not held and so on, in one sentence."""
    if given.audit is None:
        return ""
    counts = Counter(given.audit["verdict"].values.astype(str).tolist())
    return f"Of {counted(sum(counts.values()), 'response')}: " + listed(
        [f"{count} {word}" for word, count in counts.most_common()]
    )


def failed_checks(given: ReportInput) -> list[str]:
    """Return the claims of the set that its own numbers do not bear out."""
    if given.audit is None:
        return []
    return [str(sentence) for sentence in json.loads(given.audit.attrs.get("failed_checks", "[]"))]
