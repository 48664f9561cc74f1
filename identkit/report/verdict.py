"""The verdict: what a person may rely on, in sentences that each name their basis."""

import json
import re
from collections import Counter, defaultdict
from dataclasses import dataclass

from identkit.figures.labels import natural_key, units_of
from identkit.figures.style import frequency_label
from identkit.grids import datasets
from identkit.plant_set.fields import Excluded, PlantSetFields
from identkit.report.contents import ReportInput
from identkit.report.fit_findings import poor_fits_sentence, variance_sentence
from identkit.report.form_words import limit_of_control, radius_is_relative
from identkit.report.mode_findings import (
    label_spread_sentence,
    lots_sentence,
    modes_sentence,
    odd_modes_sentence,
)
from identkit.report.numbers import counted, listed, number, percent
from identkit.report.price_findings import yardstick_sentence
from identkit.report.touches import touching

HELD, NOT_HELD, NO_SET = "held", "not held", "no set"


@dataclass(frozen=True)
class Headline:
    """The answer in a few words.

    Attributes
    ----------
    state
        "held", "not held" or "no set".
    sentence
        One sentence.
    """

    state: str
    sentence: str


def headline(given: ReportInput) -> Headline:
    """Return the answer in a few words: whether the set holds what was measured and used."""
    contents = given.plant_set
    if contents is None:
        return Headline(NO_SET, "No plant set was made; the stages that ran are below.")
    measured, audit = contents.certificate.measured, contents.certificate.audit
    if audit is not None and not audit.passed:
        failed = audit.failed[0] if audit.failed else "no reason is recorded"
        return Headline(NOT_HELD, f"The audit failed: {_ended(failed)}")
    if measured.held < measured.of:
        missing = measured.of - measured.held
        return Headline(
            NOT_HELD, f"{counted(missing, 'response')} of {measured.of} used lie outside the set."
        )
    return Headline(HELD, f"The set holds all {measured.of} measured responses that were used.")


def verdict(given: ReportInput) -> list[str]:
    """Return the verdict in plain sentences, each with its basis.

    Parameters
    ----------
    given
        What the stages wrote; a stage that did not run adds no sentence.
    """
    made = (_nominal, _form, _weight, _setters, _limit_of_control, yardstick_sentence)
    makers = (*_FOUND, *made, _marked_but_kept, _coverage, _envelope)
    return [sentence for make in makers if (sentence := make(given))]


def short_verdict(given: ReportInput) -> list[str]:
    """Return the sentences of the verdict that a terminal shows; the page has them all."""
    makers = (*_FOUND, _form, _weight, _setters, yardstick_sentence, _coverage)
    return [sentence for make in makers if (sentence := make(given))]


def _held(given: ReportInput) -> str:
    read = sum(part.sizes["response"] for part in datasets(given.responses))
    if given.plant_set is None:
        return f"{counted(read, 'response')} read{_skipped(given)}; no set was made."
    certificate = given.plant_set.certificate
    measured, audit = certificate.measured, certificate.audit
    which = f"({read} read{_skipped(given)}; {_left_out(given)})"
    if audit is not None and not audit.passed:
        return (
            f"Not shown to hold the {counted(measured.of, 'measured response')} used {which}: the "
            f"audit failed."
        )
    return f"Holds {measured.held} of {measured.of} measured responses used {which}."


def _skipped(given: ReportInput) -> str:
    names = [file for file, _ in skipped_files(given)]
    return f", {counted(len(names), 'file')} skipped as unusable: {listed(names, 3)}" * bool(names)


def _left_out(given: ReportInput) -> str:
    excluded = excluded_names(given.plant_set)
    if not excluded:
        return "none left out"
    owners = _owners(given)
    by_reason: dict[str, list[str]] = defaultdict(list)
    for name, reason in excluded.items():
        by_reason[reason].append(name)
    parts = []
    for reason, names in by_reason.items():
        units = sorted({owners.get(name, name) for name in names}, key=natural_key)
        named = len(units) == 1 and units[0] in reason
        whose = "" if named else f" of {'unit' if len(units) == 1 else 'units'} {listed(units, 3)}"
        parts.append(f"{len(names)} left out{whose}, {reason}")
    return listed(parts, 3)


def _owners(given: ReportInput) -> dict[str, str]:
    owners: dict[str, str] = {}
    for part in datasets(given.responses):
        names = part["response"].values.astype(str).tolist()
        owners.update(zip(names, units_of(part).tolist(), strict=True))
    return owners


def skipped_files(given: ReportInput) -> list[tuple[str, str]]:
    """Return (file, reason) of every file that was skipped when the responses were read."""
    text = given.responses.attrs.get("skipped_files") or "[]"
    return [(str(entry["file"]), str(entry["reason"])) for entry in json.loads(text)]


def excluded_names(contents: PlantSetFields | None) -> dict[str, str]:
    """Return the responses left out of the bound, each with its reason."""
    if contents is None:
        return {}
    excluded: tuple[Excluded, ...] = contents.certificate.measured.excluded
    return {each.label: each.reason for each in excluded}


def _marked_but_kept(given: ReportInput) -> str:
    if given.screening is None:
        return ""
    out = excluded_names(given.plant_set)
    counts: Counter[str] = Counter()
    kept = 0
    for part in datasets(given.screening):
        marks = part["mark"].values.astype(str).tolist()
        for name, row in zip(part["response"].values, part["response_mark"].values, strict=True):
            if row.any() and str(name) not in out:
                kept += 1
                counts.update(mark for mark, hit in zip(marks, row, strict=True) if hit)
    if not kept:
        return ""
    kinds = listed([f"{count} as {mark}" for mark, count in counts.most_common()])
    return (
        f"Screening marked {counted(kept, 'response')} that stayed in the bound ({kinds}): marks "
        f"never drop anything, so look at them before relying on the set."
    )


def _nominal(given: ReportInput) -> str:
    if given.nominal is None or "floor_distance_mean_db" not in given.nominal:
        return ""
    if given.plant_set is not None and not radius_is_relative(given.plant_set):
        return ""
    mean = float(given.nominal["floor_distance_mean_db"].values)
    peak = float(given.nominal["floor_distance_peak_db"].values)
    return (
        f"The nominal asks for {mean:.1f} dB more radius than the best conceivable one, on "
        f"average over log frequency, and {peak:.1f} dB at worst (smallest enclosing disc of the "
        f"plants at each frequency)."
    )


def _weight(given: ReportInput) -> str:
    if given.plant_set is None:
        return ""
    best = given.plant_set.certificate.optimality
    return (
        f"Weight of order {best.order} is within {number(max(best.gap_db, 0.0), 2)} dB of the "
        f"best possible of that order: it exceeds the required radius times the allowed profile "
        f"by at most {best.excess_db:.2f} dB, against a proved floor of {best.floor_db:.2f} dB "
        f"(linear programming)."
    )


def _rechecked(given: ReportInput) -> str:
    if given.plant_set is None:
        return ""
    between, audit = given.plant_set.certificate.between_grid, given.plant_set.certificate.audit
    beyond = between.worst - 1.0
    worst = f"1 + {number(beyond, 2)}" if 0.0 < beyond < 1e-3 else number(between.worst, 6)
    found = (
        f"between the measured frequencies the largest reach is {worst} ({_short(between.method)}; "
        f"tolerance {number(between.tolerance, 2)})"
    )
    if audit is None:
        return f"Not audited yet; {found}."
    if not audit.passed:
        forced = " The set file was written all the same, as asked." * audit.forced
        return f"The audit failed: {_ended('; '.join(audit.failed))}{forced}"
    return f"The audit, which computes every reach again from the set file alone, agrees; {found}."


def _setters(given: ReportInput) -> str:
    touches = touching(given)
    if not touches:
        return ""
    shown = [
        f"{touch.unit} ({'; '.join(touch.places[:3])}{'; ...' * (len(touch.places) > 3)})"
        for touch in touches
    ]
    places = sum(len(touch.places) for touch in touches)
    return (
        f"The bound is set at {counted(places, 'frequency', 'frequencies')}, where a plant touches "
        f"the weight: {listed(shown, 3)}{' units' * (len(shown) > 3)}."
    )


def _form(given: ReportInput) -> str:
    return "" if given.bound is None else str(given.bound.attrs.get("form_rule", ""))


def _limit_of_control(given: ReportInput) -> str:
    return "" if given.plant_set is None else limit_of_control(given.plant_set)


def _coverage(given: ReportInput) -> str:
    if given.coverage.get("sentence"):
        return str(given.coverage["sentence"])
    stated = given.plant_set.certificate.coverage if given.plant_set is not None else None
    if stated is None:
        return (
            "The set holds the plants that were measured; nothing is claimed about the next unit. "
            "No coverage figure is a safety certificate."
        )
    return (
        f"With {percent(stated.confidence)} confidence the set holds at least "
        f"{percent(stated.content)} of all units ({stated.method}, {counted(stated.units, 'unit')}"
        f"). This figure is no safety certificate."
    )


def _envelope(given: ReportInput) -> str:
    if given.plant_set is None:
        return ""
    low, high = given.plant_set.band
    text = f"Everything is claimed from {frequency_label(low)} to {frequency_label(high)}"
    temperature = given.plant_set.certificate.envelope.temperature
    if temperature is not None:
        text += f" and at the temperatures measured ({temperature[0]:g} to {temperature[1]:g} °C)"
    return text + "; outside, nothing is."


def _short(method: str) -> str:
    """Return a method without its citations and conditions, which stand in the tables."""
    return re.split(r"[(;]", method)[0].strip()


def _ended(sentence: str) -> str:
    return re.sub(r"[.;\s]*$", "", sentence) + "."


_FOUND = (
    _held,
    _rechecked,
    poor_fits_sentence,
    variance_sentence,
    modes_sentence,
    label_spread_sentence,
    lots_sentence,
    odd_modes_sentence,
)
